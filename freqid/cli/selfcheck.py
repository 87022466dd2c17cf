"""freqid selfcheck: recompute the published values on this machine."""

from __future__ import annotations

import math
import time
from collections.abc import Sequence
from itertools import groupby
from pathlib import Path

import click

from freqid.cli.options import json_option
from freqid.cli.output import print_json, print_table, say
from freqid.published_values import ValueCheck, check_published_values, reference_folder

__all__ = ["command"]

COLUMNS = ("row", "quantity", "published", "computed", "deviation", "allowed", "")


@click.command("selfcheck")
@json_option
@click.option(
    "--report",
    type=click.Path(path_type=Path, dir_okay=False),
    help="Also write a page to sign: machine, versions, date, values and the SHA-256 of every file (HTML).",
)
def command(as_json: bool, report: Path | None) -> int:
    """Recompute the published values in reference_data with this installation and print both.

    Exit status 1 where one is missed.

    \b
    Example:
      freqid selfcheck --report selfcheck.html
    """
    begun = time.perf_counter()
    checks = list(check_published_values())
    seconds = time.perf_counter() - begun
    if as_json:
        print_json(_as_json(checks, seconds))
    else:
        _print_groups(checks)
        click.echo(_summary(checks, seconds))
    if report is not None:
        _write_report(report, checks)
        say(f"wrote {report}")
    return 0 if all(check.passed for check in checks) else 1


def _print_groups(checks: Sequence[ValueCheck]) -> None:
    for file, group in groupby(checks, key=lambda check: check.entry.file):
        print_table([_row(check) for check in group], columns=COLUMNS, title=file)


def _summary(checks: Sequence[ValueCheck], seconds: float) -> str:
    missed = sum(not check.passed for check in checks)
    sources, groups = _counts(checks)
    return (
        f"{len(checks)} published values from {sources} sources in {groups} groups, {missed} missed "
        f"({seconds:.1f} s)"
    )


def _counts(checks: Sequence[ValueCheck]) -> tuple[int, int]:
    """Different sources, and groups (one for each file)."""
    return len({check.entry.source for check in checks}), len({check.entry.file for check in checks})


def _write_report(report: Path, checks: Sequence[ValueCheck]) -> None:
    from freqid.installation import inspect_installation
    from freqid.selfcheck_page import selfcheck_page
    from freqid.test_folder import write_text

    write_text(report, selfcheck_page(checks, inspect_installation(reference_folder())))


def _row(check: ValueCheck) -> tuple[str, ...]:
    entry = check.entry
    return (
        entry.row,
        entry.quantity,
        f"{entry.published:g} {entry.unit}",
        check.fault or f"{check.computed:.7g}",
        f"{check.deviation:+.2g}",
        f"±{entry.tolerance:g}",
        "pass" if check.passed else "MISSED",
    )


def _as_json(checks: Sequence[ValueCheck], seconds: float) -> dict[str, object]:
    sources, groups = _counts(checks)
    return {
        "format": "freqid selfcheck",
        "format_version": 1,
        "failed": sum(not check.passed for check in checks),
        "sources": sources,
        "groups": groups,
        "seconds": seconds,
        "values": [_value_as_json(check) for check in checks],
    }


def _value_as_json(check: ValueCheck) -> dict[str, object]:
    entry = check.entry
    return {
        "file": entry.file,
        "row": entry.row,
        "quantity": entry.quantity,
        "inputs": {name: _finite(value) for name, value in entry.inputs.items()},
        "published": entry.published,
        "unit": entry.unit,
        "computed": _finite(check.computed),
        "deviation": _finite(check.deviation),
        "fault": check.fault or None,
        "tolerance": entry.tolerance,
        "rule_error_percent": entry.rule_error_percent,
        "status": entry.status,
        "source": entry.source,
        "passed": check.passed,
    }


def _finite(value: float) -> float | None:
    """The number, or None (null in JSON) for infinity and NaN."""
    return value if math.isfinite(value) else None
