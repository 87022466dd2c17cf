"""freqid capture: play the profile and keep both streams."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any, Literal

import click

from freqid.cli.options import FiniteRange, folder_argument, json_option, run_kind_option
from freqid.cli.output import print_json, progress_bar
from freqid.cli.recovered import tell_recovered
from freqid.cli.run_summary import print_run, run_as_json
from freqid.cli.sound_verb import PlayOptions, calibrate, play
from freqid.records import RunKind
from freqid.stages.capture import capture_simulated
from freqid.stages.sound_capture import SoundChannels, SoundSettings
from freqid.test_folder import TestFolder

__all__ = ["command"]

NUMBER = re.compile(r"\d+(\.\d*)?|\.\d+")


class LevelsCommand(click.Command):
    """Takes every number after --levels, as in `--levels 0.5 1 2`."""

    def parse_args(self, ctx: click.Context, args: list[str]) -> list[str]:
        """Join the numbers with commas before the words are parsed."""
        joined: list[str] = []
        after_levels = False
        for word in args:
            if after_levels and NUMBER.fullmatch(word):
                joined[-1] = word if joined[-1] == "--levels" else f"{joined[-1]},{word}"
                if joined[-1] == word:
                    joined[-1:] = ["--levels", word]
                continue
            after_levels = word == "--levels"
            joined.append(word)
        return super().parse_args(ctx, joined)


class Levels(click.ParamType[Any]):
    """Numbers above 0, by commas."""

    name = "levels"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> tuple[float, ...]:
        """The levels as numbers."""
        if isinstance(value, tuple):
            return value
        try:
            levels = tuple(float(word) for word in str(value).split(","))
        except ValueError:
            self.fail(f"{value!r} is no list of numbers; write --levels 0.5 1 2", param, ctx)
        if not all(0 < level <= 100 for level in levels):
            self.fail(f"{value!r}: every level must be above 0 and at most 100", param, ctx)
        return levels


class Loopback(click.ParamType[Any]):
    """A channel from 1 on, or none."""

    name = "channel"

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> int | Literal["none"]:
        """The channel as a number, or "none"."""
        if value == "none":
            return "none"
        try:
            channel = int(value)
        except ValueError:
            channel = 0
        if channel < 1:
            self.fail(f"{value!r} is no channel; give a number from 1 on, or none", param, ctx)
        return channel


CHANNEL = click.IntRange(min=1)


@click.command("capture", cls=LevelsCommand)
@folder_argument
@run_kind_option
@click.option("--device", metavar="NAME", help="Number, name or part of the name of a sound interface, as `freqid"
              " devices` lists it; 'simulated' is the rig of [simulated] behind a sound interface in software.")
@click.option("--input-device", metavar="NAME", help="Where the system lists inputs apart from outputs.")
@click.option("--drive-channel", type=CHANNEL, default=1, show_default=True, help="Output that drives the rig.")
@click.option("--loopback-channel", type=Loopback(), metavar="N|none",
              help="Input that records the voltage; 1 unless given, none where there is one input only.")
@click.option("--angle-channel", type=CHANNEL, help="Input of the angle sensor; 2 unless given.")
@click.option("--runs", type=click.IntRange(1, 1000), default=1, show_default=True, help="So many runs, each its own"
              " file.")
@click.option("--levels", type=Levels(), default="1", metavar="X [X ...]", help="Times the designed voltage, for"
              " amplitude dependence; each level is checked against the limits.")
@click.option("--periods", type=click.IntRange(min=1), help="Play the steady part of a periodic profile so many times,"
              " instead of as often as designed.")
@click.option("--guard", type=FiniteRange(0, 1, min_open=True), default=0.95, show_default=True,
              help="Share of the way to the stops beyond which the test is ended.")
@click.option("--armed", is_flag=True, help="The cautions are acknowledged; do not ask.")
@click.option("--calibrate", "wants_calibration", is_flag=True, help="Play a small tone instead and work out the volts"
              " at full scale from a meter.")
@click.option("--reads", type=FiniteRange(0, min_open=True), metavar="VRMS", help="What the meter reads while"
              " calibrating; asked for on a terminal.")
@click.option("--simulate", is_flag=True, help="Use the rig of [simulated] in rig.toml instead of a real one.")
@click.option("--seed", type=click.IntRange(min=0), help="Of the simulated noise; drawn, and noted, unless given.")
@json_option
def command(folder: Path, kind: RunKind, simulate: bool, as_json: bool, **words: Any) -> None:  # fmt: skip
    """Play the profile in FOLDER and record voltage and angle as a new run: --device NAME, or --simulate.

    `--kind response` plays profile.*, `--kind step` plays step_profile.*. Through a sound interface the voltage comes
    back on one input (the loopback) and the angle on another; the cautions are shown and must be acknowledged. Ctrl-C
    at any time brings the voltage to the bias in a ramp and keeps what was recorded.

    \b
    Examples:
      freqid capture vane --simulate --seed 1
      freqid capture vane --kind step --simulate --seed 2
    """
    channels = SoundChannels(
        device=words["device"],
        input_device=words["input_device"],
        drive=words["drive_channel"],
        loopback=words["loopback_channel"],
        angle=words["angle_channel"],
    )
    if simulate and channels != SoundChannels():
        raise click.UsageError("--device and --simulate exclude each other, and so do channels; give one of them")
    if words["reads"] is not None and not words["wants_calibration"]:
        raise click.UsageError("--reads belongs to --calibrate; give both")
    test = TestFolder.existing(folder)
    tell_recovered(test)
    if simulate:
        _simulate(test, kind, words, as_json=as_json)
        return
    options = PlayOptions(armed=words["armed"], as_json=as_json)
    if words["wants_calibration"]:
        calibrate(test, channels, options, reads=words["reads"])
        return
    settings = SoundSettings(
        kind=kind,
        channels=channels,
        guard=words["guard"],
        runs=words["runs"],
        levels=words["levels"],
        periods=words["periods"],
        seed=words["seed"],
    )
    play(test, settings, options)


def _simulate(test: TestFolder, kind: RunKind, words: dict[str, Any], *, as_json: bool) -> None:
    if words["periods"] is not None or words["wants_calibration"]:
        raise click.UsageError("--periods and --calibrate go through a sound interface; try --device simulated")
    levels = [level for level in words["levels"] for _ in range(words["runs"])]
    seed, told = words["seed"], []
    for number, level in enumerate(levels):
        own_seed = None if seed is None else seed + number
        with progress_bar() as progress:
            run = capture_simulated(test, kind=kind, level=level, seed=own_seed, progress=progress)
        if as_json:
            told.append(run_as_json(test, run))
        else:
            print_run(test, run, as_json=False)
    if as_json:
        print_json(told[0] if len(told) == 1 else {"runs": told})
