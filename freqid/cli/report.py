"""freqid report: one self-contained HTML page with the figures."""

from __future__ import annotations

from pathlib import Path

import click

from freqid.cli.options import folder_argument
from freqid.cli.output import print_table, progress_bar
from freqid.cli.viewer import show_file
from freqid.stages.report import FigureForm, report_folder
from freqid.test_folder import TestFolder

__all__ = ["command"]


@click.command("report")
@folder_argument
@click.option("--figures", "forms", type=click.Choice(["pdf", "png"]), multiple=True,
              help="A form in which each figure is written besides SVG; may be given twice.")
@click.option("--show", is_flag=True, help="Open the page with its figures in a window.")
def command(folder: Path, forms: tuple[FigureForm, ...], show: bool) -> None:
    """Write report.html (self-contained, to be read, printed or sent) and figures/* of FOLDER.

    What is missing is left out, with the command that makes it.

    \b
    Example:
      freqid report vane --figures pdf
    """
    test = TestFolder.existing(folder)
    with progress_bar() as progress:
        path = report_folder(test, forms=forms, progress=progress)
    print_table([("report", str(path)), ("figures", str(test.figures))])
    if show:
        show_file(path)
