"""How large may a sweep be at each of its frequencies?

As large as voltage, slew rate and the swing of every rig allow at that frequency: small where the rig resonates, large
beside it. The steady response gives the first shape. A resonance that is passed at a finite speed answers later and
rings on, so the angle of every rig is then computed, and the amplitude corrected cycle by cycle where it swung too far
or not far enough. The last word has the scaling to the limits (`excitation.amplitude`).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from excitation.limits import Limits
from excitation.profile import Floats, Profile
from excitation.rig_model import RigModel, response_of
from excitation.swing import hold_response, predicted_angle

__all__ = ["SweepCourse", "safe_envelope"]

_RIGS_WEIGHED = 9
_MOST_STRETCHES = 400
_CORRECTIONS = 5
_CORRECTION_PART = 0.7  # of what would mend the swing if the angle followed at once
_LARGEST_STEP = 1.5  # of one correction


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SweepCourse:
    """The sweep at unit amplitude within its profile, and its frequency at every sample."""

    unit: Profile  # fades and rests included
    start: int  # of the sweep, sample
    frequency: Floats = field(metadata={"unit": "Hz"})  # (N,)


def safe_envelope(
    course: SweepCourse, limits: Limits, rigs: Sequence[RigModel], *, margin: float, largest: float
) -> Floats:
    """Amplitude in V at every sample of the sweep, (N,): nowhere above `largest`.

    Parameters
    ----------
    margin : float
        The part of the way to the stops that may be used.
    """
    rigs = rigs[:_RIGS_WEIGHED]
    edges = _stretches(course)
    middles = (edges[:-1] + edges[1:]) / 2
    frequency = course.frequency[middles.astype(np.int64)]
    cap = np.minimum(largest, limits.slew_rate / (2 * np.pi * frequency))
    if not rigs:
        return _interpolated(cap, middles, course)
    allowed = margin * limits.angle
    held = np.abs(hold_response(frequency, step=1 / course.unit.sample_rate, hold=course.unit.hold))
    gain = np.max([np.abs(response_of(rig, frequency)) for rig in rigs], axis=0) * held
    tried = [np.minimum(cap, allowed / gain)]
    worth = []
    for _ in range(_CORRECTIONS):
        swing = _swings(course, _interpolated(tried[-1], middles, course), rigs, edges)
        worth.append(np.mean(np.log(tried[-1])) + min(0.0, np.log(allowed / np.max(swing))))
        correction = np.clip((allowed / swing) ** _CORRECTION_PART, 1 / _LARGEST_STEP, _LARGEST_STEP)
        tried.append(np.minimum(cap, tried[-1] * correction))
    return _interpolated(tried[int(np.argmax(worth))], middles, course)


def _stretches(course: SweepCourse) -> NDArray[np.int64]:
    """Sample numbers, from the first of the sweep to one past its last, that part it into whole cycles."""
    n_samples = course.frequency.size
    cycles = np.cumsum(course.frequency) / course.unit.sample_rate
    n_stretches = int(np.clip(cycles[-1] // 1, 2, min(_MOST_STRETCHES, n_samples // 2)))
    inner = np.searchsorted(cycles, np.linspace(0, cycles[-1], n_stretches + 1)[1:-1])
    return np.unique(np.concatenate([[0], inner, [n_samples]])).astype(np.int64)


def _interpolated(amplitude: Floats, middles: Floats, course: SweepCourse) -> Floats:
    return np.interp(np.arange(course.frequency.size), middles, amplitude)


def _swings(course: SweepCourse, envelope: Floats, rigs: Sequence[RigModel], edges: NDArray[np.int64]) -> Floats:
    """Largest angle of all rigs in each stretch of the sweep; the last one holds what comes after it, too."""
    unit = course.unit
    voltage = unit.voltage.copy()
    driven = slice(course.start, course.start + envelope.size)
    voltage[driven] = unit.bias + (voltage[driven] - unit.bias) * envelope
    profile = replace(unit, voltage=voltage)
    times = (course.start + edges[:-1]) / unit.sample_rate
    largest = np.zeros(times.size)
    for rig in rigs:
        predicted = predicted_angle(profile, rig)
        first = np.minimum(np.searchsorted(predicted.time, times), predicted.time.size - 1)
        largest = np.maximum(largest, np.maximum.reduceat(np.abs(predicted.angle), first))
    return largest
