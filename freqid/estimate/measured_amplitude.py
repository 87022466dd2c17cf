"""At which amplitude was it measured? A rig that is not quite linear has another answer at another swing.

Taken over the steady part of a periodic excitation, else from the first to the last change of the voltage. rms values
count from the mean, the peak from the rest angle; the angle is the fitted motion, so that noise does not swell it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit
from freqid.quantity import in_unit

__all__ = ["MeasuredAmplitude", "mean_amplitude", "measured_amplitude"]


@dataclass(frozen=True, slots=True, kw_only=True)
class MeasuredAmplitude:
    """rms voltage, rms angle and largest swing to one side."""

    rms_voltage: float = in_unit("V")
    rms_angle: float = in_unit("angle_unit")
    peak_angle: float = in_unit("angle_unit")

    def as_json(self) -> dict[str, float]:
        """The form of "amplitude" in results/model.json."""
        return {"rms_voltage": self.rms_voltage, "rms_angle": self.rms_angle, "peak_angle": self.peak_angle}

    @classmethod
    def from_json(cls, data: dict[str, Any]) -> MeasuredAmplitude:
        """Back from `as_json`; other keys are left alone."""
        return cls(rms_voltage=data["rms_voltage"], rms_angle=data["rms_angle"], peak_angle=data["peak_angle"])


def measured_amplitude(record: Record, fit: RecordFit) -> MeasuredAmplitude:
    """Amplitude of one run from its record and its fit."""
    p, drive = fit.parameters, record.drive
    instants = drive.start + drive.interval * np.arange(len(drive.value))
    if record.periodicity is not None:
        first, last = record.periodicity.start, record.periodicity.stop
    else:
        changes = np.flatnonzero((np.diff(drive.value) != 0) | (drive.slope[:-1] != 0))
        last_change = min(int(changes[-1]) + 1, len(instants) - 1) if len(changes) else -1
        first = float(instants[changes[0]]) if len(changes) else float(instants[0])
        last = float(instants[last_change]) + drive.interval
    driven = (instants >= first) & (instants < last)
    time = p.clock_ratio * record.stamp - p.model.delay
    moved = (time >= first) & (time < last)
    angle = fit.prediction.angle[moved] if np.any(moved) else fit.prediction.angle
    voltage = drive.value[driven] if np.any(driven) else drive.value
    return MeasuredAmplitude(
        rms_voltage=float(np.std(voltage)),
        rms_angle=float(np.std(angle)),
        peak_angle=float(np.max(np.abs(angle - p.rest_angle))),
    )


def mean_amplitude(found: Sequence[MeasuredAmplitude]) -> MeasuredAmplitude:
    """Of several runs: root mean squares, and the largest peak."""
    return MeasuredAmplitude(
        rms_voltage=float(np.sqrt(np.mean([one.rms_voltage**2 for one in found]))),
        rms_angle=float(np.sqrt(np.mean([one.rms_angle**2 for one in found]))),
        peak_angle=max(one.peak_angle for one in found),
    )
