"""freqid new: the folder of a test."""

from __future__ import annotations

from pathlib import Path

import click

from freqid.cli.options import folder_argument
from freqid.stages.new import create_folder

__all__ = ["command"]


@click.command("new")
@folder_argument
def command(folder: Path) -> None:
    """Make FOLDER with a commented rig.toml: the sheet that says what the rig may take.

    It describes the built-in vane; replace its values by those of your rig before anything moves.

    \b
    Example:
      freqid new vane
    """
    made = create_folder(folder)
    click.echo(made.rig)
    click.echo(
        f"Now fill in {made.rig.name}: limits first, then what the step test told."
        f" Then `freqid rehearse {made.quoted}` or `freqid excite {made.quoted}`.",
        err=True,
    )
