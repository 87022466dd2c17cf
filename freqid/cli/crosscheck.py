"""freqid crosscheck: the comparison, the verdict, causes and the next test."""

from __future__ import annotations

from pathlib import Path

import click

from freqid.cli.options import folder_argument, json_option
from freqid.cli.output import print_json, print_table
from freqid.crosscheck.comparison_result import ComparedRow, CrossCheck
from freqid.crosscheck.result_file import crosscheck_as_json
from freqid.quantity import Quantity
from freqid.stages.crosscheck import cross_check_folder
from freqid.test_folder import TestFolder

__all__ = ["EXIT_STATUS", "command", "print_cross_check"]

EXIT_STATUS = {"agree": 0, "disagree": 3, "unresolved": 4}


@click.command("crosscheck")
@folder_argument
@json_option
def command(folder: Path, as_json: bool) -> int:
    """Hold the frequency test of FOLDER against its step test, within the tolerances of rig.toml.

    Exit status 0 agree, 3 disagree, 4 unresolved. Writes results/crosscheck.json. Example: freqid crosscheck vane
    """
    check = cross_check_folder(TestFolder.existing(folder))
    if as_json:
        print_json({"format": "freqid crosscheck", "format_version": 1, **crosscheck_as_json(check)})
    else:
        print_cross_check(check)
    return EXIT_STATUS[check.verdict]


def print_cross_check(check: CrossCheck) -> None:
    """Every row, the agreement strip, then the verdict, its causes and the next test."""
    print_table(
        [_cells(row) for row in check.compared],
        columns=("quantity", *check.labels, "difference", "unit", "En", "verdict"),
    )
    for row in check.compared:
        if row.difference is None:
            click.echo(f" {row.quantity.replace('_', ' ')}: {row.reason}")
    click.echo(f"\n{_strip(check)}")
    click.echo(f"\n{check.verdict.upper()}: {check.sentence}")
    if check.joint is not None:
        click.echo(f"Jointly: chi-square {check.joint.statistic:.3g} with {check.joint.degrees_of_freedom} degrees of "
                   f"freedom, p = {check.joint.p_value:.2g}")  # fmt: skip
    for cause in check.causes:
        click.echo(f"Cause? {cause.cause.replace('_', ' ')} ({cause.strength:.1f}): {cause.evidence}")
    if check.next_test is not None:
        for command in check.next_test.commands or (check.next_test.command,):
            click.echo(f"Next: {command}")
        click.echo(f"      {check.next_test.reason}")


def _cells(row: ComparedRow) -> tuple[str, ...]:
    verdict = "-" if row.verdict == "not judged" else row.verdict
    en = "" if row.en is None else f"{row.en:+.2f}"
    known = [q for q in (row.frequency_test, row.step_test) if q is not None]
    unit = known[0].unit if known and known[0].unit != "1" else ""
    numbers = (_text(row.frequency_test), _text(row.step_test), _text(row.difference))
    return row.quantity.replace("_", " "), *numbers, unit, en, verdict


def _text(quantity: Quantity | None) -> str:
    return "" if quantity is None else " ± ".join(quantity.rounded())


def _strip(check: CrossCheck) -> str:
    import sys

    from freqid.report.agreement_words import agreement_text

    encoding = (sys.stdout.encoding or "ascii").lower()
    return agreement_text(check, width=100, ascii=not encoding.startswith("utf"))
