"""freqid report: one self-contained HTML page with the figures."""

from __future__ import annotations

from pathlib import Path

import click

from freqid.cli.options import folder_argument
from freqid.cli.output import print_table, progress_bar
from freqid.stages.report import report_folder
from freqid.test_folder import TestFolder

__all__ = ["command"]


@click.command("report")
@folder_argument
def command(folder: Path) -> None:
    """Write report.html (self-contained, to be read, printed or sent) and figures/*.svg of FOLDER.

    What is missing is left out, with the command that makes it. Example: freqid report vane
    """
    test = TestFolder.existing(folder)
    with progress_bar() as progress:
        path = report_folder(test, progress=progress)
    print_table([("report", str(path)), ("figures", str(test.figures))])
