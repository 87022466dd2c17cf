"""How fast may a sweep pass a resonance, and what does it do to the response when it is faster?

With the half-power width B = fr / Q, Q = 1 / (2 zeta): at most 54 fr^2 / Q^2 Hz per minute (0.9 B^2 Hz/s) for a linear
sweep and 77.6 fr / Q^2 octaves per minute for an exponential one. That is the usual rule for an error of the peak of
about 5 % (it is that of ISO 7626-2, quoted from memory). At a given rate, the response read off sample by sample has a
lower, later and wider peak; a fit to the whole record in time, which follows the motion, has none of this.

Sources: the rule as above; the lag of a slow sweep, twice the ring-down time, in B. Cowan et al., arXiv:1910.10995;
the table of distortions is our own, computed for light damping.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Literal

import numpy as np

from excitation.rig_model import Resonance, RigModel, find_resonance

__all__ = ["Course", "SweepDistortion", "distortion_at_rate", "fastest_rate", "slowest_resonance", "sweep_time"]

Course = Literal["exponential", "linear"]

_LINEAR_RULE, _EXPONENTIAL_RULE = 54.0, 77.6  # Hz/min and octaves/min, times fr^2 / Q^2 and fr / Q^2
_RATE = (0.1, 0.3, 1.0, 3.0)  # B^2 Hz/s
_PEAK_LOSS = (0.0019, 0.0125, 0.0620, 0.171)  # of the peak
_LAG = (0.0622, 0.171, 0.456, 0.993)  # of B
_WIDENING = (0.0048, 0.0395, 0.258, 0.759)  # of B


@dataclass(frozen=True, slots=True, kw_only=True)
class SweepDistortion:
    """Of a peak passed at `rate` (Hz/s over the square of the half-power width): relative loss, lag, widening."""

    rate: float = field(metadata={"unit": "1"})
    peak_loss: float = field(metadata={"unit": "1"})
    lag: float = field(metadata={"unit": "half-power widths"})
    widening: float = field(metadata={"unit": "1"})


def fastest_rate(resonance: Resonance, *, course: Course) -> float:
    """Largest rate by the rule: Hz/min for a linear sweep, octaves/min for an exponential one."""
    width_squared = (resonance.half_power_width / resonance.frequency) ** 2  # 1 / Q^2
    if course == "linear":
        return _LINEAR_RULE * resonance.frequency**2 * width_squared
    return _EXPONENTIAL_RULE * resonance.frequency * width_squared


def sweep_time(resonance: Resonance, *, band: tuple[float, float], course: Course) -> float:
    """Shortest time in s for a sweep over the band at the rate of the rule."""
    span = band[1] - band[0] if course == "linear" else math.log2(band[1] / band[0])
    return 60 * span / fastest_rate(resonance, course=course)


def distortion_at_rate(
    resonance: Resonance, *, band: tuple[float, float], duration: float, course: Course
) -> SweepDistortion:
    """What a sweep over the band in `duration` s does to the peak, read off sample by sample.

    Between the rates of the table (0.1 to 3) along a power law, and beyond it as the outermost two tell.
    """
    if course == "linear":
        speed = (band[1] - band[0]) / duration
    else:
        speed = resonance.frequency * math.log(band[1] / band[0]) / duration
    rate = speed / resonance.half_power_width**2
    loss, lag, widening = (_along_power_law(rate, column) for column in (_PEAK_LOSS, _LAG, _WIDENING))
    return SweepDistortion(rate=rate, peak_loss=min(loss, 1.0), lag=lag, widening=widening)


def slowest_resonance(rigs: Sequence[RigModel], *, band: tuple[float, float]) -> Resonance | None:
    """Of all rigs the resonance within the band that asks for the slowest sweep; None where none has one there."""
    found = [find_resonance(rig, band=(band[0] / 4, band[1] * 4)) for rig in rigs]
    inside = [peak for peak in found if peak is not None and band[0] <= peak.frequency <= band[1]]
    return min(inside, key=lambda peak: fastest_rate(peak, course="exponential"), default=None)


def _along_power_law(rate: float, column: tuple[float, ...]) -> float:
    logarithm, rates = np.log(column), np.log(_RATE)
    place = int(np.clip(np.searchsorted(rates, math.log(rate)) - 1, 0, len(rates) - 2))
    slope = (logarithm[place + 1] - logarithm[place]) / (rates[place + 1] - rates[place])
    return float(np.exp(logarithm[place] + slope * (math.log(rate) - rates[place])))
