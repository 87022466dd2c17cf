"""What does an imperfect driver make of the voltage it is told? A drive in, the drive that reaches the rig out.

All count from rest (the drive's first value): unequal gain up and down, clipping, limited slew rate, a
first-order lag. The last two turn a staircase into straight lines between points. A limited slew is exact where it
limits for whole steps of the drive, else late by an eighth of a step at most; the lag is sampled so finely (8 points
a time constant, at most 100 a step of the drive) that its straight lines miss it by (1/8)^2 / 8 = 2e-3 of a voltage
jump, for an eighth of the time constant.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from freqid.held_response import Drive

__all__ = ["clipped", "lagging", "slew_limited", "unequal"]

Floats = NDArray[np.float64]
STEPS_PER_TIME_CONSTANT = 8
MOST_PER_INTERVAL = 100
SLEW_STEPS = 4  # per interval of the drive


def unequal(drive: Drive, asymmetry: float) -> Drive:
    """Voltages above rest times 1 + asymmetry / 2, below rest times 1 - asymmetry / 2."""
    factor = 1 + asymmetry / 2 * np.sign(drive.value)
    return _like(drive, drive.value * factor)


def clipped(drive: Drive, limit: float) -> Drive:
    """Clipped at `limit` V on either side of rest."""
    return _like(drive, np.clip(drive.value, -limit, limit))


def slew_limited(drive: Drive, limit: float) -> Drive:
    """Follows at `limit` V/s at most; where the drive goes faster, a ramp."""
    h = drive.interval / SLEW_STEPS
    target = _refined(drive, h, 1, SLEW_STEPS)
    reached = np.empty(len(target) + 1)
    reached[0] = now = 0.0
    begins = np.flatnonzero(np.diff(target, prepend=np.nan))
    # one stretch of constant target at a time: a ramp, then the target itself
    for begin, end in zip(begins.tolist(), [*begins[1:].tolist(), len(target)], strict=True):
        aim, most = float(target[begin]), limit * h
        if abs(aim - now) <= most:
            reached[begin + 1 : end + 1] = now = aim
            continue
        ramp = now + math.copysign(most, aim - now) * np.arange(1, end - begin + 1)
        reached[begin + 1 : end + 1] = np.minimum(ramp, aim) if aim > now else np.maximum(ramp, aim)
        now = float(reached[end])
    return _joined(reached, start=drive.start, interval=h, rest=drive.rest)


def lagging(drive: Drive, time_constant: float) -> Drive:
    """First-order lag: w + T w' = u, exact at the points of a grid finer than T / 20."""
    from scipy.signal import lfilter

    refine = min(max(1, math.ceil(STEPS_PER_TIME_CONSTANT * drive.interval / time_constant)), MOST_PER_INTERVAL)
    h = drive.interval / refine
    value = _refined(drive, h, 0, refine)
    slope = np.repeat(drive.slope, refine)
    decay = math.exp(-h / time_constant)
    # straight input v + s t over a step: w(h) = decay w(0) + (1 - decay) (v - s T) + s h
    force = (1 - decay) * (value - slope * time_constant) + slope * h
    after = np.asarray(lfilter([1.0], [1.0, -decay], force))
    return _joined(np.concatenate([[0.0], after]), start=drive.start, interval=h, rest=drive.rest)


def _refined(drive: Drive, h: float, first: int, n: int) -> Floats:
    """Voltage at `n` instants of every interval, `h` s apart from number `first` on, in one row."""
    inside = h * np.arange(first, first + n)
    return np.asarray((drive.value[:, None] + drive.slope[:, None] * inside).ravel())


def _like(drive: Drive, value: Floats) -> Drive:
    """Other values on the same grid, held or joined as before; the first stays rest."""
    changed = Drive.from_samples(
        value, start=drive.start, interval=drive.interval, smooth=bool(np.any(drive.slope != 0))
    )
    return replace(changed, rest=drive.rest)


def _joined(value: Floats, *, start: float, interval: float, rest: float) -> Drive:
    return replace(Drive.from_samples(value, start=start, interval=interval, smooth=True), rest=rest)
