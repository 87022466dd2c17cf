"""Does a logged voltage hold between its samples, or do they sample a smooth signal?

A log at the output converter's own rate holds the converter's steps, one sample each. A log whose
successive samples are mostly equal shows the steps themselves. Any other log samples a signal whose
staircase it cannot see, and is taken as smooth.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.records import Hold

__all__ = ["HoldDecision", "decide_hold", "is_staircase"]

_SAME_RATE = 0.01  # relative; clocks differ by some 1e-3, rates that are meant to differ by far more


@dataclass(frozen=True, slots=True, kw_only=True)
class HoldDecision:
    """The hold, and why."""

    hold: Hold
    note: str


def decide_hold(
    time: NDArray[np.float64], voltage: NDArray[np.float64], *, output_rate: float, output_hold: Hold
) -> HoldDecision:
    """Decide how a logged voltage (M,) at the stamps `time` (M,) in s behaves between its samples.

    `output_rate` (Hz) and `output_hold` are the output converter's.
    """
    if is_staircase(voltage):
        return HoldDecision(hold="zero-order", note="input held between samples (most successive samples are equal)")
    rate = (time.size - 1) / (time[-1] - time[0]) if time[-1] > time[0] else np.inf
    if output_hold == "zero-order" and abs(rate / output_rate - 1) < _SAME_RATE:
        return HoldDecision(
            hold="zero-order", note=f"input held between samples (logged at the output's {output_rate:g} Hz)"
        )
    return HoldDecision(
        hold="smooth",
        note=f"input taken as smooth between samples (logged at {rate:.6g} Hz, without visible steps)",
    )


def is_staircase(voltage: NDArray[np.float64]) -> bool:
    """Whether most successive samples (M,) are equal, for another reason than a coarse resolution.

    A slow signal seen with a coarse resolution also rests on one value, but then moves by the smallest step only.
    """
    steps = np.abs(np.diff(voltage))
    moves = steps[steps > 0]
    if moves.size == 0 or 2 * moves.size >= steps.size:
        return False
    smallest = moves.min()
    coarse = np.mean(moves < 1.5 * smallest) > 0.5 and np.ptp(voltage) > 8 * smallest
    return not coarse
