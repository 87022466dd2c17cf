"""Where is the resonance on the measured curve itself, how high and how wide? Read off without the fitted model.

For a second-order rig 1 / |G|^2 is exactly a parabola in f^2,

    1 / |G|^2 = [ (1 - x)^2 + 4 zeta^2 x ] / K^2,    x = (f / fn)^2

and near any single resonance nearly so. A weighted least-squares parabola through the points around the peak gives its
frequency, its height, and the width between the half-power points (where 1 / |G|^2 is twice its minimum).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.frequency_response import FrequencyResponse
from freqid.quantity import Quantity

__all__ = ["ResonanceReading", "read_resonance"]

Floats = NDArray[np.float64]

AROUND_PEAK = 0.55  # points at least this share of the highest gain take part (half power is 0.707)
FLATTEST = 0.97  # of the peak: an end of the band higher than this leaves no peak to read
FEWEST_POINTS = 5


@dataclass(frozen=True, slots=True, kw_only=True)
class ResonanceReading:
    """Frequency, height and half-power width (difference of the half-power frequencies) of the measured peak."""

    resonance_frequency: Quantity
    resonance_gain: Quantity
    half_power_width: Quantity


def read_resonance(measured: FrequencyResponse) -> ResonanceReading | str:
    """Read the peak, or say in one sentence why there is none to read."""
    gain = measured.gain
    clear = gain > 4 * measured.gain_uncertainty
    if clear.sum() < FEWEST_POINTS:
        return "too few lines stand clear of the noise"
    top = int(np.argmax(np.where(clear, gain, 0)))
    # a low peak: stay above the gain at both ends of the band
    edge = max(float(gain[0]), float(gain[-1])) / float(gain[top])
    least = max(AROUND_PEAK, 1.01 * edge)
    low, high = top, top
    while low > 0 and gain[low - 1] > least * gain[top]:
        low -= 1
    while high < len(gain) - 1 and gain[high + 1] > least * gain[top]:
        high += 1
    if low == 0 or high == len(gain) - 1 or least > FLATTEST:
        return "the gain has no peak inside the measured band"
    if high - low + 1 < FEWEST_POINTS:
        return (
            f"only {high - low + 1} of the {FEWEST_POINTS} lines needed lie on the peak: choose a longer period, or a "
            f"longer record"
        )
    return _parabola(measured, slice(low, high + 1))


def _parabola(measured: FrequencyResponse, around: slice) -> ResonanceReading | str:
    f, gain = measured.frequency[around], measured.gain[around]
    power = np.maximum(gain**2 - measured.variance[around], 1e-3 * gain**2)  # E|G + e|^2 = |G|^2 + variance
    target = 1 / power
    deviation = 2 * measured.gain_uncertainty[around] / gain**3
    scale = float(f[np.argmax(gain)])
    x = (f / scale) ** 2
    design = np.stack([np.ones_like(x), x - 1, (x - 1) ** 2], axis=1) / deviation[:, None]
    inverse = np.linalg.inv(design.T @ design)
    coefficient = inverse @ (design.T @ (target / deviation))
    misfit = float(np.mean((target / deviation - design @ coefficient) ** 2)) * len(x) / max(len(x) - 3, 1)
    covariance = inverse * max(misfit, 1.0)
    peak = _peak(coefficient)
    if peak is None:
        return "the points around the highest gain do not form a peak"
    slopes = np.zeros((3, 3))
    for i in range(3):
        step = 1e-4 * np.sqrt(covariance[i, i])
        moved = [_peak(coefficient + np.eye(3)[i] * s) for s in (step, -step)]
        if moved[0] is None or moved[1] is None:
            return "the points around the highest gain do not determine a peak"
        slopes[:, i] = (moved[0] - moved[1]) / (2 * step)
    u = np.sqrt(np.diag(slopes @ covariance @ slopes.T))
    unit = f"{measured.angle_unit}/V"
    return ResonanceReading(
        resonance_frequency=Quantity.normal(peak[0] * scale, "Hz", float(u[0]) * scale),
        resonance_gain=Quantity.normal(float(peak[1]), unit, float(u[1])),
        half_power_width=Quantity.normal(peak[2] * scale, "Hz", float(u[2]) * scale),
    )


def _peak(c: Floats) -> Floats | None:
    """Frequency, height, width of the peak of 1 / sqrt(c0 + c1 z + c2 z^2), z = x - 1; None where there is none."""
    if c[2] <= 0:
        return None
    z = -c[1] / (2 * c[2])
    least = c[0] - c[1] ** 2 / (4 * c[2])
    if least <= 0 or z <= -1:
        return None
    half = np.sqrt(least / c[2])
    if 1 + z - half <= 0:
        return None
    return np.array([np.sqrt(1 + z), 1 / np.sqrt(least), np.sqrt(1 + z + half) - np.sqrt(1 + z - half)])
