"""Are the stamps rounded so coarsely that counting frames tells their instants better?

A stamp rounded to a step q is wrong by q / sqrt(12) (rms). Where the sensor's own jitter, which is what remains of the
stamps' deviation from even spacing after the rounding is taken off in quadrature, is smaller than that, evenly spaced
instants through the stamps are nearer the truth than the stamps. Gaps in the count stay gaps.

Source: variance of a uniform distribution, JCGM 100:2008, 4.3.7.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["evened", "rounding_step"]

Floats = NDArray[np.float64]
FINEST = 1e-4  # s: finer steps do no harm
MICROSECOND = 1e-6
FIRST_STRETCH = 9  # frames


def rounding_step(stamp: Floats) -> float:
    """Largest step (s) that all differences of the stamps (N,) are multiples of; 0 where it is below `FINEST`."""
    ticks = np.diff(stamp) / MICROSECOND
    whole = np.round(ticks)
    if not np.all(np.abs(ticks - whole) < 0.02):
        return 0.0
    step = float(np.gcd.reduce(whole.astype(np.int64))) * MICROSECOND
    return step if step >= FINEST else 0.0


def evened(stamp: Floats) -> tuple[Floats, float]:
    """Evenly spaced instants (N,) in place of coarsely rounded stamps and the rounding step; the stamps and 0 where
    they are better as they are.
    """
    step = rounding_step(stamp)
    if step == 0.0:
        return stamp, 0.0
    even = _even(stamp)
    deviation = float(np.mean((stamp - even) ** 2))
    if deviation > 2 * step**2 / 12 or deviation < 1e-3 * step**2:
        return stamp, 0.0
    return even, step


def _even(stamp: Floats) -> Floats:
    """Straight line through the count of frames, counted over ever longer stretches: each line is sharp enough to count
    twice as far, however coarse the first differences.
    """
    count = min(FIRST_STRETCH, len(stamp))
    interval, begin = float(np.median(stamp[count - 1 :] - stamp[: len(stamp) - count + 1])) / (count - 1), stamp[0]
    while True:
        slot = _rising(np.round((stamp[:count] - begin) / interval))
        if np.ptp(slot) == 0:
            return stamp
        interval, begin = (float(v) for v in np.polyfit(slot, stamp[:count], 1))
        if count == len(stamp):
            return np.asarray(begin + interval * _rising(np.round((stamp - begin) / interval)))
        count = min(2 * count, len(stamp))


def _rising(slot: Floats) -> Floats:
    """One frame a slot: the number lost so far, its median over some frames as rounding may miss a slot, never falls.
    """
    order = np.arange(len(slot))
    half = FIRST_STRETCH // 2
    around = np.lib.stride_tricks.sliding_window_view(np.pad(slot - order, half, mode="edge"), 2 * half + 1)
    return np.asarray(np.maximum.accumulate(np.median(around, axis=1)) + order)
