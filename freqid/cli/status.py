"""freqid status: how far a test has come."""

from __future__ import annotations

from pathlib import Path

import click

from freqid.cli.options import folder_argument, json_option
from freqid.cli.output import print_json, print_table
from freqid.stages.status import folder_status
from freqid.test_folder import TestFolder

__all__ = ["command"]


@click.command("status")
@folder_argument
@json_option
def command(folder: Path, as_json: bool) -> None:
    """Say what is in FOLDER, what is out of date, and which command comes next. Nothing is written.

    A result is out of date where a file it was made from has changed since, or a newer run is there.

    \b
    Example:
      freqid status vane
    """
    status = folder_status(TestFolder.existing(folder))
    if as_json:
        print_json(status.as_json())
        return
    print_table([(part.name, part.file, part.state, part.detail) for part in status.parts],
                columns=("part", "file", "state", ""))  # fmt: skip
    if status.verdict is not None:
        click.echo(f"verdict: {status.verdict}")
    if status.next_command is None:
        click.echo(f"next: nothing; {status.reason}")
    else:
        click.echo(f"next: {status.next_command}\n      {status.reason}")
