"""freqid rehearse: the whole job on the simulated rig."""

from __future__ import annotations

from pathlib import Path

import click

from freqid.cli.crosscheck import print_cross_check
from freqid.cli.output import print_caveats, print_table, progress_bar, say
from freqid.stages.rehearse import rehearse

__all__ = ["command"]


@click.command("rehearse")
@click.argument("folder", type=click.Path(path_type=Path), default=Path("rehearsal"))
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Of phases and simulated noise.")
def command(folder: Path, seed: int) -> None:
    """Design, run, estimate, cross-check and report on the simulated rig of FOLDER's rig.toml: the dry run.

    Without a rig sheet the built-in vane is used, in a new folder ("rehearsal" unless named).

    \b
    Example:
      freqid rehearse
    """
    with progress_bar() as progress:
        done = rehearse(folder, seed=seed, progress=progress)
    print_caveats(done.identification.model.caveats)
    print_cross_check(done.check)
    click.echo("")
    print_table([("report", str(done.folder.report)), ("figures", str(done.folder.figures))])
    say(f"Nothing real has moved. Next: put your own rig into {done.folder.rig} and rehearse it.")
