"""How does a cross-check get into results/crosscheck.json and back?"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

from freqid.crosscheck.comparison_result import USUAL_LABELS, Cause, ComparedRow, CrossCheck, JointTest, NextTest
from freqid.crosscheck.requirements import RequirementRow
from freqid.errors import TestFolderError
from freqid.quantity import Caveat, Quantity

if TYPE_CHECKING:
    from freqid.test_folder import TestFolder

__all__ = ["CROSSCHECK_FORMAT", "crosscheck_as_json", "read_crosscheck", "write_crosscheck"]

CROSSCHECK_FORMAT = "freqid crosscheck"


def write_crosscheck(folder: TestFolder, check: CrossCheck, *, computed_from: Iterable[Path]) -> None:
    """Write results/crosscheck.json, whole or not at all."""
    content = folder.provenance(format=CROSSCHECK_FORMAT, computed_from=computed_from)
    folder.write_json(folder.crosscheck, {**content, **crosscheck_as_json(check)})


def crosscheck_as_json(check: CrossCheck) -> dict[str, Any]:
    """The body of results/crosscheck.json."""
    return {
        "verdict": check.verdict,
        "sentence": check.sentence,
        "labels": list(check.labels),
        "compared": [row.as_json() for row in check.compared],
        "joint": None if check.joint is None else asdict(check.joint),
        "causes": [cause.as_json() for cause in check.causes],
        "next_test": None if check.next_test is None else check.next_test.as_json(),
        "requirements": [row.as_json() for row in check.requirements],
        "warnings": [c.as_json() for c in check.caveats],
    }


def read_crosscheck(folder: TestFolder) -> CrossCheck:
    """The cross-check in results/crosscheck.json; raises TestFolderError where it is missing, damaged or newer."""
    content = folder.read_json(folder.crosscheck, format=CROSSCHECK_FORMAT)
    try:
        return CrossCheck(
            verdict=content["verdict"],
            sentence=content["sentence"],
            compared=tuple(_row(row) for row in content["compared"]),
            joint=None if content["joint"] is None else JointTest(**content["joint"]),
            causes=tuple(Cause.from_json(cause) for cause in content["causes"]),
            next_test=NextTest.from_json(content["next_test"]),
            labels=_labels(content.get("labels", USUAL_LABELS)),
            requirements=tuple(RequirementRow.from_json(row) for row in content.get("requirements", ())),
            caveats=Caveat.all_from_json(content["warnings"]),
        )
    except (KeyError, TypeError, ValueError) as error:
        raise TestFolderError(
            f"{folder.crosscheck}: damaged ({error!r}); run `freqid crosscheck {folder.quoted}` again"
        ) from None


def _labels(labels: Sequence[str]) -> tuple[str, str]:
    first, second = labels
    return first, second


def _row(row: dict[str, Any]) -> ComparedRow:
    quantities = {name: Quantity.from_json(row[name]) for name in ("frequency_test", "step_test", "difference")}
    return ComparedRow(
        **quantities,
        quantity=row["quantity"],
        en=row["en"],
        tolerance=row["tolerance"],
        verdict=row["verdict"],
        reason=row["reason"],
    )
