"""How many volts does digital full scale give and take? A tone is played through the sound interface, a meter is read.

Nothing is written into the rig sheet: the figures are told, and the user decides.
"""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

from freqid.capture.sound.calibration import (
    Calibration,
    calibration_from_reading,
    calibration_tone,
    tone_amplitude,
)
from freqid.capture.sound.folding import FoldedRun
from freqid.capture.sound.session import Live, record
from freqid.capture.sound.simulated_interface import SimulatedFaults
from freqid.errors import CaptureError
from freqid.rig import Rig
from freqid.run_file import open_run
from freqid.stages.planned_rig import check_against_limits, limits_of
from freqid.stages.sound_recording import SoundChannels, checked_rig, plant_of, recording_of
from freqid.test_folder import TestFolder

__all__ = ["calibrate_through_sound_interface"]

GUARD = 0.5  # of the way to the stops: a tone that moves the rig so far is wrong
PART_TAKEN = (0.25, 0.75)  # of the record, where the tone stands


def calibrate_through_sound_interface(
    folder: TestFolder,
    channels: SoundChannels,
    *,
    duration: float,
    consent: Callable[[dict[str, Any]], None],
    live: Callable[[Live], None],
    read_meter: Callable[[Calibration], float | None],
) -> Calibration:
    """Play the tone for `duration` s, then ask `read_meter` (V rms; None: not read) and work out both full scales.

    Raises
    ------
    CaptureError
        The device refuses, the tone was cut short, or the loopback carries none.
    RigSheetError, excitation.ExcitationError
        Sheet or limits do not allow it.
    """
    rig = checked_rig(folder, simulated=channels.simulated)
    tone = calibration_tone(rig, limit=limits_of(rig).voltage, duration=duration)
    check_against_limits(tone, rig)
    heading = {
        "kind": "response",
        "profile": {"source": "calibration tone", "sha256": None, "content": "voltage as sent"},
    }
    recording = replace(
        recording_of(rig, tone, channels=channels, guard=GUARD, heading=heading), watch_loopback=False
    )
    if channels.simulated:
        recording.order["simulated"] = plant_of(rig, seed=0, faults=SimulatedFaults())
    with tempfile.TemporaryDirectory(prefix="freqid-calibration-", ignore_cleanup_errors=True) as place:
        folded = record(TestFolder(Path(place)), recording, consent=consent, live=live)
        if folded.reason is not None and not folded.reason.startswith("not verified"):
            raise CaptureError(f"calibrate: {folded.reason}; the tone was cut short, play it again")
        loopback = _loopback_amplitude(folded, rig, tone.settings["frequency"])
    expected = calibration_from_reading(tone, reading=None, rig=rig, loopback_amplitude=loopback)
    return calibration_from_reading(tone, reading=read_meter(expected), rig=rig, loopback_amplitude=loopback)


def _loopback_amplitude(folded: FoldedRun, rig: Rig, frequency: float) -> float | None:
    """Digital amplitude of the tone in the recorded voltage; None without a loopback."""
    if folded.run.input.commanded:
        return None
    with open_run(folded.path) as run:
        begin, stop = (round(part * run.input.size) for part in PART_TAKEN)
        values = run.input.values(begin, stop).astype(float)
    scale = rig.output.loopback_full_scale or rig.output.full_scale
    return tone_amplitude(values, sample_rate=folded.sample_rate, frequency=frequency) / scale
