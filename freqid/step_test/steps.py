"""Where are the steps? Plateaus of the voltage and the changes between them.

A step is a change of the voltage that is over within a short time (a ramp under a slew limit is still one step) and
stands
between two plateaus. The instant of the step is the middle of the change.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.errors import StepTestError
from freqid.held_response import Drive
from freqid.quantity import in_unit

__all__ = ["VoltageStep", "find_steps"]

Floats = NDArray[np.float64]

SMALLEST_STEP = 0.05  # of the whole voltage range; smaller changes belong to a plateau
LONGEST_CHANGE = 0.5  # of the shorter plateau beside it; a long change is a ramp, which the evaluation tells


@dataclass(frozen=True, slots=True, kw_only=True)
class VoltageStep:
    """One step of the voltage, counted from rest: `time` of the middle of the change; the plateaus beside it."""

    time: float = in_unit("s")
    duration: float = in_unit("s")
    before: float = in_unit("V")
    after: float = in_unit("V")
    plateau_start: float = in_unit("s")
    plateau_stop: float = in_unit("s")

    @property
    def change(self) -> float:
        """Voltage after minus voltage before, V."""
        return self.after - self.before


def find_steps(drive: Drive) -> list[VoltageStep]:
    """Every step in the drive; raises StepTestError where there is none."""
    value = drive.value
    span = float(np.ptp(value))
    threshold = SMALLEST_STEP * span
    quiet = _plateau_mask(value, threshold)
    runs = _runs(quiet)
    longest = max((stop - start for start, stop in runs), default=0)
    plateaus = [(start, stop) for start, stop in runs if stop - start >= max(3, 0.02 * longest)]
    steps = []
    for number in range(len(plateaus) - 1):
        (start, stop), (next_start, next_stop) = plateaus[number], plateaus[number + 1]
        before, after = float(np.median(value[start:stop])), float(np.median(value[next_start:next_stop]))
        change = next_start - stop + 1
        longest_change = max(LONGEST_CHANGE * min(stop - start, next_stop - next_start), 2)
        if abs(after - before) < threshold or change > longest_change:
            continue
        steps.append(
            VoltageStep(
                # a held value changes when its sample begins; the last old sample still stands until then
                time=drive.start + (stop + next_start) / 2 * drive.interval,
                duration=(change - 1) * drive.interval,
                before=before + drive.rest,
                after=after + drive.rest,
                plateau_start=drive.start + start * drive.interval,
                plateau_stop=drive.start + next_stop * drive.interval,
            )
        )
    if not steps:
        raise StepTestError(
            f"no step found: the voltage never changes by more than {threshold:.3g} V (5 % of its range) between two "
            "plateaus; check the input column, or use `estimate` for other excitations"
        )
    return steps


def _plateau_mask(value: Floats, threshold: float) -> NDArray[np.bool_]:
    """True where a sample differs from its predecessor by less than the noise of the plateaus allows."""
    change = np.abs(np.diff(value, prepend=value[0]))
    noise = 1.4826 * float(np.median(change))
    return change <= max(min(6 * noise, threshold), 1e-9 * max(float(np.ptp(value)), 1e-300))


def _runs(mask: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """Start and stop of every stretch of true; a stretch begins with the sample that its predecessor moved to."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], mask, [False]]).astype(int)))
    return [(max(int(a) - 1, 0), int(b)) for a, b in zip(edges[::2], edges[1::2], strict=True)]
