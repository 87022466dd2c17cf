"""freqid capture: play the profile and keep both streams."""

from __future__ import annotations

from pathlib import Path

import click

from freqid.cli.cautions import print_cautions
from freqid.cli.options import folder_argument, json_option, run_kind_option
from freqid.cli.output import progress_bar
from freqid.cli.run_summary import print_run
from freqid.records import RunKind
from freqid.stages.capture import capture_simulated, capture_through_sound_interface
from freqid.test_folder import TestFolder

__all__ = ["command"]


@click.command("capture")
@folder_argument
@run_kind_option
@click.option("--device", metavar="NAME", help="Name or number of the sound interface, as `freqid devices` lists it.")
@click.option("--simulate", is_flag=True, help="Use the rig of [simulated] in rig.toml instead of a real one.")
@click.option("--seed", type=click.IntRange(min=0), help="Of the simulated noise; drawn, and noted, unless given.")
@json_option
def command(folder: Path, kind: RunKind, device: str | None, simulate: bool, seed: int | None, as_json: bool) -> None:
    """Play the profile in FOLDER and record voltage and angle as a new run.

    `--kind response` plays profile.*, `--kind step` plays step_profile.*. In this version only --simulate
    records; for a real rig play the exported profile yourself and use `freqid import`.
    """
    if simulate and device is not None:
        raise click.UsageError("--device and --simulate exclude each other; give one of them")
    test = TestFolder.existing(folder)
    if not simulate:
        print_cautions()
        capture_through_sound_interface(test, kind=kind, device=device)
    with progress_bar() as progress:
        run = capture_simulated(test, kind=kind, seed=seed, progress=progress)
    print_run(test, run, as_json=as_json)
