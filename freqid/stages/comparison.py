"""Do two folders agree, or a folder with an old sheet? Like is held against like, kept in results/comparison.json.

Frequency test against frequency test and step test against step test, where both folders hold one; else whatever they
hold. Tolerances are those of the first folder's rig sheet; results/crosscheck.json stays as it is.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import combinations
from pathlib import Path
from typing import Any

from freqid.crosscheck.comparison import JUDGED, compare
from freqid.crosscheck.comparison_result import CrossCheck, Verdict
from freqid.crosscheck.findings import Findings, findings_of_model, findings_of_step
from freqid.crosscheck.next_test import propose_repeat
from freqid.crosscheck.result_file import crosscheck_as_json
from freqid.crosscheck.typed_values import parse_typed_values
from freqid.errors import CrossCheckError
from freqid.estimate.resonance import read_resonance
from freqid.estimate.result_files import read_identification
from freqid.quantity import Caveat
from freqid.rig import Rig, read_rig
from freqid.step_test.result_file import read_step_result
from freqid.test_folder import TestFolder

__all__ = ["COMPARISON_FORMAT", "Comparison", "compare_folders", "compare_with_typed_values"]

COMPARISON_FORMAT = "freqid comparison"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Comparison:
    """Every pair that was held against each other."""

    checks: tuple[CrossCheck, ...]

    @property
    def verdict(self) -> Verdict:
        """*disagree* where one pair does, *agree* where all do, else *unresolved*."""
        verdicts = {check.verdict for check in self.checks}
        return "disagree" if "disagree" in verdicts else "unresolved" if "unresolved" in verdicts else "agree"

    def as_json(self) -> dict[str, Any]:
        """The body of results/comparison.json."""
        return {"verdict": self.verdict, "comparisons": [crosscheck_as_json(check) for check in self.checks]}


def compare_folders(folders: Sequence[TestFolder]) -> Comparison:
    """Every two of the folders held against each other; written to the first one's results/comparison.json.

    Raises
    ------
    CrossCheckError
        A folder is named twice or holds no result, or the angle units differ.
    TestFolderError, RigSheetError
        A file is damaged.
    """
    _check_distinct(folders)
    rig = read_rig(folders[0].rig)
    held = [_findings(folder, read_rig(folder.rig), label=str(folder.path)) for folder in folders]
    checks = [
        _checked(one, other, rig) for first, second in combinations(held, 2) for one, other in _pairs(first, second)
    ]
    return _written(folders[0], Comparison(checks=tuple(checks)), [file for f in folders for file in _sources(f)])


def compare_with_typed_values(folder: TestFolder, texts: Sequence[str]) -> Comparison:
    """Each test of the folder held against typed values such as "gain=12 ± 0.3"; written to results/comparison.json.

    Raises CrossCheckError where a text cannot be read or nothing is there to compare; the others as `compare_folders`.
    """
    rig = read_rig(folder.rig)
    typed = parse_typed_values(texts, angle_unit=rig.angle_unit)
    told = tuple(
        Caveat("typed_without_uncertainty", f"{name}: typed without an uncertainty and taken as exact; add its ±")
        for name in typed.exact
    )
    held = _findings(folder, rig, label="")
    checks = [replace(_checked(one, typed.findings, rig), caveats=told) for one in held.values()]
    return _written(folder, Comparison(checks=tuple(checks)), _sources(folder))


def _check_distinct(folders: Sequence[TestFolder]) -> None:
    seen: set[Path] = set()
    for folder in folders:
        place = folder.path.resolve()
        if place in seen:
            raise CrossCheckError(f"{folder.path}: named twice; a test says nothing about itself: name another folder")
        seen.add(place)


def _findings(folder: TestFolder, rig: Rig, *, label: str) -> dict[str, Findings]:
    """What the folder holds, by kind; `label` stands before the kind."""
    before = f"{label}, " if label else ""
    found: dict[str, Findings] = {}
    if folder.model.exists():
        one = read_identification(folder)
        found["frequency test"] = findings_of_model(
            one.model, read_resonance(one.response), label=f"{before}frequency test", folder=folder.quoted
        )
    if folder.step.exists():
        found["step test"] = findings_of_step(
            read_step_result(folder), label=f"{before}step test", folder=folder.quoted
        )
    if not found:
        raise CrossCheckError(
            f"{folder.results}: holds neither model.json nor step.json; run `freqid estimate {folder.quoted}` or "
            f"`freqid steptest {folder.quoted}` first"
        )
    return found


def _pairs(first: dict[str, Findings], second: dict[str, Findings]) -> list[tuple[Findings, Findings]]:
    alike = [(first[kind], second[kind]) for kind in first if kind in second]
    return alike or [(one, other) for one in first.values() for other in second.values()]


def _checked(first: Findings, second: Findings, rig: Rig) -> CrossCheck:
    tolerance = {name: getattr(rig.tolerance, name) for name in JUDGED}
    check = compare(first, second, tolerance=tolerance)
    return replace(check, next_test=propose_repeat(check, first, second))


def _sources(folder: TestFolder) -> list[Path]:
    return [path for path in (folder.rig, folder.model, folder.response_h5, folder.step) if path.exists()]


def _written(folder: TestFolder, comparison: Comparison, sources: list[Path]) -> Comparison:
    content = folder.provenance(format=COMPARISON_FORMAT, computed_from=sources)
    folder.write_json(folder.results / "comparison.json", {**content, **comparison.as_json()})
    return comparison
