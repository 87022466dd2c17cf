"""freqid selfcheck: recompute the published values on this machine."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import groupby

import click

from freqid.cli.options import json_option
from freqid.cli.output import print_json, print_table
from freqid.published_values import ValueCheck, check_published_values

__all__ = ["command"]


@click.command("selfcheck")
@json_option
def command(as_json: bool) -> int:
    """Recompute the published values in reference_data with this installation and print both.

    Exit status 1 where one is missed. Example: freqid selfcheck
    """
    checks = list(check_published_values())
    failed = sum(not check.passed for check in checks)
    if as_json:
        print_json({"format": "freqid selfcheck", "format_version": 1, "failed": failed, "values": _as_json(checks)})
    else:
        for source, group in groupby(checks, key=lambda check: check.entry.file):
            print_table([_row(c) for c in group], columns=("row", "quantity", "published", "computed", "deviation", "allowed", ""), title=source)  # noqa: E501
        click.echo(f"{len(checks)} published values, {failed} missed")
    return 1 if failed else 0


def _row(check: ValueCheck) -> tuple[str, ...]:
    entry = check.entry
    return (
        entry.row,
        entry.quantity,
        f"{entry.published:g} {entry.unit}",
        f"{check.computed:.7g}",
        f"{check.deviation:+.2g}",
        f"±{entry.tolerance:g}",
        "pass" if check.passed else "MISSED",
    )


def _as_json(checks: Sequence[ValueCheck]) -> list[dict[str, object]]:
    return [
        {
            "file": c.entry.file,
            "row": c.entry.row,
            "quantity": c.entry.quantity,
            "published": c.entry.published,
            "computed": c.computed,
            "deviation": c.deviation,
            "tolerance": c.entry.tolerance,
            "status": c.entry.status,
            "source": c.entry.source,
            "passed": c.passed,
        }
        for c in checks
    ]
