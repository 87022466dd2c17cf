"""freqid crosscheck: the comparison, the verdict, causes and the next test."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from freqid.cli.options import folder_argument, json_option
from freqid.cli.output import print_caveats, print_json, print_table, progress_bar
from freqid.crosscheck.comparison_result import ComparedRow, CrossCheck
from freqid.quantity import Quantity
from freqid.test_folder import TestFolder

if TYPE_CHECKING:
    from freqid.crosscheck.requirements import RequirementRow
    from freqid.stages.comparison import Comparison

__all__ = ["EXIT_STATUS", "command", "print_cross_check"]

EXIT_STATUS = {"agree": 0, "disagree": 3, "unresolved": 4}


@click.command("crosscheck")
@folder_argument
@click.argument("others", nargs=-1, type=click.Path(path_type=Path))
@click.option("--against", multiple=True, metavar="QUANTITY=VALUE",
              help='A value from elsewhere, such as "gain=12 ± 0.3" (95 %), "gain=12(0.3)" (standard uncertainty).')
@json_option  # fmt: skip
def command(folder: Path, others: tuple[Path, ...], against: tuple[str, ...], as_json: bool) -> int:
    """Hold the frequency test of FOLDER against its step test, within the tolerances of rig.toml.

    With OTHERS: the tests of FOLDER against those of the other folders, like against like. With --against: the tests
    of FOLDER against typed values. Exit status 0 agree, 3 disagree, 4 unresolved. Writes results/crosscheck.json, or
    results/comparison.json.

    \b
    Examples:
      freqid crosscheck vane
      freqid crosscheck vane --against "natural_frequency=3.0 ± 0.1"
    """
    if others or against:
        return _compared(TestFolder.existing(folder), others, against, as_json=as_json)
    from freqid.crosscheck.result_file import crosscheck_as_json
    from freqid.stages.crosscheck import cross_check_folder

    with progress_bar() as progress:
        check = cross_check_folder(TestFolder.existing(folder), progress=progress)
    if as_json:
        print_json({"format": "freqid crosscheck", "format_version": 1, **crosscheck_as_json(check)})
    else:
        print_cross_check(check)
    return EXIT_STATUS[check.verdict]


def print_cross_check(check: CrossCheck) -> None:
    """Every row, the agreement strip, the acceptance limits, then the verdict, its causes and the next test."""
    print_table(
        [_cells(row) for row in check.compared],
        columns=("quantity", *check.labels, "difference", "unit", "En", "verdict"),
    )
    for row in check.compared:
        if row.difference is None:
            click.echo(f" {row.quantity.replace('_', ' ')}: {row.reason}")
    click.echo(f"\n{_strip(check)}")
    if check.requirements:
        _print_requirements(check.requirements)
    click.echo(f"\n{check.verdict.upper()}: {check.sentence}")
    if check.joint is not None:
        p = check.joint.p_value
        click.echo(f"Jointly: chi-square {check.joint.statistic:.3g} with {check.joint.degrees_of_freedom} degrees of "
                   f"freedom, p {'< 1e-6' if p < 1e-6 else f'= {p:.2g}'}")  # fmt: skip
    for cause in check.causes:
        click.echo(f"Cause? {cause.cause.replace('_', ' ')} ({cause.strength:.1f}): {cause.evidence}")
        if cause.against:
            click.echo(f"       but: {cause.against}")
    if check.next_test is not None:
        for one in check.next_test.commands or (check.next_test.command,):
            click.echo(f"Next: {one}")
        click.echo(f"      {check.next_test.reason}")


def _compared(folder: TestFolder, others: tuple[Path, ...], against: tuple[str, ...], *, as_json: bool) -> int:
    from freqid.stages.comparison import compare_folders, compare_with_typed_values

    if others and against:
        raise click.UsageError("give either other folders or --against, not both")
    if others:
        comparison = compare_folders([folder, *(TestFolder.existing(other) for other in others)])
    else:
        comparison = compare_with_typed_values(folder, against)
    if as_json:
        print_json({"format": "freqid comparison", "format_version": 1, **comparison.as_json()})
    else:
        _print_comparison(comparison)
    return EXIT_STATUS[comparison.verdict]


def _print_comparison(comparison: Comparison) -> None:
    for number, check in enumerate(comparison.checks):
        click.echo(f"{'' if number == 0 else chr(10)}{' against '.join(check.labels)}")
        print_cross_check(check)
        print_caveats(check.caveats)


def _print_requirements(rows: tuple[RequirementRow, ...]) -> None:
    click.echo()
    print_table(
        [_requirement_cells(row) for row in rows],
        columns=("required", "limit", "frequency test", "step test", "verdict"),
    )


def _requirement_cells(row: RequirementRow) -> tuple[str, ...]:
    bound = "at most" if row.sense == "max" else "at least"
    unit = "" if row.unit == "1" else f" {row.unit}"
    verdict = f"{row.verdict}: {row.reason}" if row.reason else row.verdict
    numbers = (_text(row.frequency_test), _text(row.step_test))
    return row.quantity.replace("_", " "), f"{bound} {row.limit:g}{unit}", *numbers, verdict


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
