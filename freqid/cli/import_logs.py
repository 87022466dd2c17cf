"""freqid import: logs made elsewhere become a run."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import click

from freqid.cli.options import FiniteRange, folder_argument, json_option, run_kind_option
from freqid.cli.output import progress_bar
from freqid.cli.run_summary import print_run
from freqid.stages.import_logs import ImportSettings, OneLog, TwoLogs, import_logs
from freqid.test_folder import TestFolder

__all__ = ["command"]

_FILE = click.Path(path_type=Path)
_COLUMN = "Header name or 1-based number of the column"

_OPTIONS = (
    click.option("--log", type=_FILE, metavar="FILE", help="One log with voltage and angle, on one clock."),
    click.option("--input", "input_", metavar="FILE|profile",
                 help="Log of the voltage; the word profile stands for the profile as it was played."),
    click.option("--angle", type=_FILE, metavar="FILE", help="Log of the angle, on its own clock."),
    click.option("--time-column", metavar="COLUMN", help=f"{_COLUMN} of times."),
    click.option("--input-column", metavar="COLUMN", help=f"{_COLUMN} of the voltage."),
    click.option("--angle-column", metavar="COLUMN", help=f"{_COLUMN} of the angle."),
    click.option("--time-unit", type=click.Choice(["s", "ms", "us", "min"]), help="Unit of the times."),
    click.option("--sample-rate", type=FiniteRange(min=0, min_open=True), metavar="HZ",
                 help="Rate of a log without times, or with frame numbers."),
    click.option("--angle-unit", type=click.Choice(["deg", "rad"]), help="Unit of the angle in the log."),
    click.option("--hold", type=click.Choice(["zero-order", "smooth"]),
                 help="How the voltage behaves between its samples; decided from the log unless given."),
    click.option("--exposure", type=FiniteRange(min=0), metavar="S",
                 help="Time over which each angle sample is averaged; the rig sheet's unless given."),
    click.option("--decimal", type=click.Choice([".", ","]), help="Decimal sign of a text log; found unless given."),
)  # fmt: skip


def _log_options(function: Callable[..., Any]) -> Callable[..., Any]:
    for option in reversed(_OPTIONS):
        function = option(function)
    return function


@click.command("import")
@folder_argument
@run_kind_option
@_log_options
@json_option
def command(
    folder: Path, log: Path | None, input_: str | None, angle: Path | None, as_json: bool, **settings: Any
) -> None:
    """Bring logs made elsewhere into FOLDER as a new run: CSV, WAV or HDF5, any column names, units and clocks.

    Either --log FILE with both columns, or --input FILE (or profile) with --angle FILE. Columns and units are
    found by their names where that is unambiguous; otherwise the columns are listed with the option to give.

    \b
    Example:
      freqid import vane --input profile --angle camera.csv --time-unit ms --angle-unit deg
    """
    sources = _sources(log, input_, angle)
    test = TestFolder.existing(folder)
    with progress_bar() as progress:
        run = import_logs(test, sources, settings=ImportSettings(**settings), progress=progress)
    print_run(test, run, as_json=as_json)


def _sources(log: Path | None, input_: str | None, angle: Path | None) -> OneLog | TwoLogs:
    if log is not None and input_ is None and angle is None:
        return OneLog(log=log)
    if log is None and input_ is not None and angle is not None:
        return TwoLogs(input="profile" if input_ == "profile" else Path(input_), angle=angle)
    raise click.UsageError("give --log FILE, or both --input FILE|profile and --angle FILE")
