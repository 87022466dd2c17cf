"""What does a damping ratio say about the resonance?

Convention: frequencies as fractions of the natural frequency fn, gains as fractions of the static gain. The
resonance is the maximum of |H| at a frequency above zero; from ζ = 1/√2 on there is none, and what depends on it
is NaN.

Source: |H(u)|² = 1/((1−u²)² + 4ζ²u²), u = f/fn, and the closed forms that follow from it (Ogata, *Modern Control
Engineering*, "Frequency-response analysis"). Checked against the published values of `reference_data`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from freqid.step_relations import checked_damping_ratio

__all__ = [
    "HIGHEST_RESONANT_DAMPING",
    "bandwidth_ratio",
    "half_power_width_ratio",
    "lower_half_power_ratio",
    "quality_factor",
    "resonance_frequency_ratio",
    "resonance_gain_ratio",
    "upper_half_power_ratio",
]

Floats = NDArray[np.float64]

HIGHEST_RESONANT_DAMPING = float(np.sqrt(0.5))


def _resonant(damping_ratio: ArrayLike) -> Floats:
    """The damping ratio, NaN where there is no resonance."""
    ratio = checked_damping_ratio(damping_ratio)
    return np.asarray(np.where(ratio < HIGHEST_RESONANT_DAMPING, ratio, np.nan))


def resonance_frequency_ratio(damping_ratio: ArrayLike) -> Floats:
    """Frequency of the largest gain over fn: √(1−2ζ²); NaN for ζ ≥ 1/√2."""
    ratio = _resonant(damping_ratio)
    return np.asarray(np.sqrt(1 - 2 * ratio**2))


def resonance_gain_ratio(damping_ratio: ArrayLike) -> Floats:
    """Largest gain over the static gain: 1/(2ζ√(1−ζ²)); NaN for ζ ≥ 1/√2."""
    ratio = _resonant(damping_ratio)
    return np.asarray(1 / (2 * ratio * np.sqrt(1 - ratio**2)))


def quality_factor(damping_ratio: ArrayLike) -> Floats:
    """Gain at fn over the static gain: 1/(2ζ), for any ζ > 0."""
    return np.asarray(1 / (2 * checked_damping_ratio(damping_ratio)))


def bandwidth_ratio(damping_ratio: ArrayLike) -> Floats:
    """Frequency over fn above which the power gain stays below half its static value (−3.01 dB), for any ζ > 0.

    √(a + √(a²+1)) with a = 1 − 2ζ²; where a is negative, the same number as 1/√(√(a²+1) − a), which keeps its digits.
    """
    ratio = checked_damping_ratio(damping_ratio)
    a = 1 - 2 * ratio**2
    square = np.abs(a) + np.hypot(a, 1)
    return np.asarray(np.where(a >= 0, np.sqrt(square), 1 / np.sqrt(square)))


def upper_half_power_ratio(damping_ratio: ArrayLike) -> Floats:
    """Frequency over fn, above the resonance, where |H|² is half its largest value; NaN for ζ ≥ 1/√2.

    The exact root u² = 1 − 2ζ² + 2ζ√(1−ζ²).
    """
    ratio = _resonant(damping_ratio)
    return np.asarray(np.sqrt(1 - 2 * ratio**2 + 2 * ratio * np.sqrt(1 - ratio**2)))


def lower_half_power_ratio(damping_ratio: ArrayLike) -> Floats:
    """Frequency over fn, below the resonance, where |H|² is half its largest value.

    The exact root u² = 1 − 2ζ² − 2ζ√(1−ζ²); NaN from ζ = sin(π/8) = 0.3827 on, where the gain at frequency zero is
    already above the half-power level.
    """
    ratio = _resonant(damping_ratio)
    square = 1 - 2 * ratio**2 - 2 * ratio * np.sqrt(1 - ratio**2)
    return np.asarray(np.sqrt(np.where(square > 0, square, np.nan)))


def half_power_width_ratio(damping_ratio: ArrayLike) -> Floats:
    """Distance between the two half-power frequencies over fn; NaN where one of them is missing (ζ ≥ 0.3827).

    4ζ√(1−ζ²)/(u₁+u₂), free of cancellation; close to 2ζ for light damping (0.25 % above it at ζ = 0.05).
    """
    ratio = _resonant(damping_ratio)
    total = lower_half_power_ratio(damping_ratio) + upper_half_power_ratio(damping_ratio)
    return np.asarray(4 * ratio * np.sqrt(1 - ratio**2) / total)
