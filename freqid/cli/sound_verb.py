"""What is said while and after a profile is played through a sound interface, or a tone to calibrate it?"""

from __future__ import annotations

import sys
from dataclasses import asdict, dataclass
from typing import Any

import click

from freqid.capture.sound.calibration import Calibration
from freqid.capture.sound.folding import FoldedRun
from freqid.cli.cautions import ask_for_consent
from freqid.cli.live_line import LiveLine
from freqid.cli.output import print_json, print_table, say
from freqid.rig import read_rig
from freqid.stages.calibrate import calibrate_through_sound_interface
from freqid.stages.sound_capture import (
    SoundChannels,
    SoundSettings,
    capture_through_sound_interface,
)
from freqid.test_folder import TestFolder

__all__ = ["PlayOptions", "calibrate", "play"]

TONE = 10.0  # s; long enough to read a meter
SHORT_TONE = 2.0  # s, where the reading is known already


@dataclass(frozen=True, slots=True, kw_only=True)
class PlayOptions:
    """Whether the cautions are acknowledged, and whether scripts are to read the result."""

    armed: bool
    as_json: bool


def play(test: TestFolder, settings: SoundSettings, options: PlayOptions) -> None:
    """Play and record, and print every run; raises what the stage raises."""
    line = LiveLine(read_rig(test.rig).angle_unit)
    runs: list[FoldedRun] = []

    def consent(ready: dict[str, Any]) -> None:
        if not settings.channels.simulated:
            ask_for_consent(ready, armed=options.armed, action=_action(settings))

    def finished(folded: FoldedRun) -> None:
        line.clear()
        runs.append(folded)
        if not options.as_json:
            _print_run(test, folded)

    try:
        capture_through_sound_interface(test, settings, consent=consent, live=line, finished=finished)
    finally:
        if options.as_json and runs:
            told = [_as_json(test, folded) for folded in runs]
            print_json(told[0] if settings.runs * len(settings.levels) == 1 else {"runs": told})


def calibrate(test: TestFolder, channels: SoundChannels, options: PlayOptions, *, reads: float | None) -> None:
    """Play the tone, take the reading, and say what to write into the rig sheet."""
    line = LiveLine(read_rig(test.rig).angle_unit)

    def consent(ready: dict[str, Any]) -> None:
        if not channels.simulated:
            ask_for_consent(ready, armed=options.armed, action="A small tone, about to be played")

    def read_meter(expected: Calibration) -> float | None:
        line.clear()
        if reads is not None or not sys.stdin.isatty():
            return reads
        say(f"By the sheet a meter across the drive reads {expected.expected_reading:.4g} V rms, alternating part.")
        text: str = click.prompt("What did it read, in V rms (nothing: not read)", default="", err=True,
                                 show_default=False)  # fmt: skip
        return float(text) if text.strip() else None

    duration = TONE if reads is None else SHORT_TONE
    found = calibrate_through_sound_interface(
        test, channels, duration=duration, consent=consent, live=line, read_meter=read_meter
    )
    _print_calibration(test, found, as_json=options.as_json)


def _action(settings: SoundSettings) -> str:
    n = settings.runs * len(settings.levels)
    levels = ", ".join(f"{level:g}" for level in settings.levels)
    return f"{n} run{'s' if n != 1 else ''} at {levels} times the designed voltage"


def _print_calibration(test: TestFolder, found: Calibration, *, as_json: bool) -> None:
    if as_json:
        print_json(asdict(found))
        return
    if found.reading is None:
        say(
            f"A tone of {found.frequency:.4g} Hz was played. By the sheet a meter across the drive reads"
            f" {found.expected_reading:.4g} V rms; run again with --reads VRMS for the calibration."
        )
        return
    rows = [("output full_scale", f"{found.output_full_scale:.5g}", "V")]
    if found.loopback_full_scale is not None:
        rows.append(("output loopback_full_scale", f"{found.loopback_full_scale:.5g}", "V"))
    print_table(rows, columns=("calibration", "value", "unit"))
    say(f"Nothing was changed. To use it, write into {test.rig}, table [output]:")
    say(f"  full_scale = {found.output_full_scale:.5g}")
    if found.loopback_full_scale is not None:
        say(f"  loopback_full_scale = {found.loopback_full_scale:.5g}")
    say("and design the profile again: its samples were made for the old value.")


def _print_run(test: TestFolder, folded: FoldedRun) -> None:
    run, unit = folded.run, folded.run.angle.angle_unit
    source = "as sent" if run.input.commanded else "measured"
    found = folded.verified
    rows = [
        ("run", f"{run.name}{', simulated' if run.simulated else ''}{'' if run.complete else ', incomplete'}"),
        ("file", test.relative_name(folded.path)),
        ("recorded", f"{folded.samples} samples at {folded.sample_rate:g} Hz, {folded.played:.2f} s of the profile"),
        ("voltage", f"{source}, {folded.voltage[0]:.3g} to {folded.voltage[1]:.3g} V"),
        ("angle", f"{folded.angle[0]:.3g} to {folded.angle[1]:.3g} {unit}"),
        ("clocks", "one for both"),
        ("verified", "yes" if run.complete else f"no: {folded.reason}"),
    ]
    if found.delay is not None:
        rows.insert(6, ("loopback", f"{found.gain:.4f} times what was sent, {found.delay:.2f} frames later, shift at"
                                    f" most {found.largest_shift:.2g} frames"))  # fmt: skip
    if (periodicity := run.input.periodicity) is not None:
        rows.insert(4, ("periodic", f"{periodicity.n_periods} periods of {periodicity.period:.4g} s, "
                                    f"{periodicity.lines.size} lines"))  # fmt: skip
    print_table(rows)
    for note in run.notes:
        say(f"note: {note}")


def _as_json(test: TestFolder, folded: FoldedRun) -> dict[str, Any]:
    run, periodicity = folded.run, folded.run.input.periodicity
    duration = (folded.samples - 1) / folded.sample_rate
    return {
        "run": run.name,
        "kind": run.kind,
        "file": test.relative_name(folded.path),
        "sample_rate": folded.sample_rate,
        "played": folded.played,
        "input": {
            "samples": folded.samples,
            "duration": duration,
            "hold": run.input.hold,
            "commanded": run.input.commanded,
            "period": periodicity.period if periodicity else None,
            "periods": periodicity.n_periods if periodicity else None,
            "range": list(folded.voltage),
        },
        "angle": {
            "samples": folded.samples,
            "duration": duration,
            "unreadable": 0,
            "unit": run.angle.angle_unit,
            "range": list(folded.angle),
        },
        "common_clock": run.common_clock,
        "complete": run.complete,
        "reason": folded.reason,
        "verification": folded.verified.as_json(),
        "simulated": run.simulated,
        "origins": [asdict(origin) for origin in run.origins],
        "notes": list(run.notes),
    }
