"""What does a damping ratio say about the step response?

Convention: the second-order lag without delay, `1 / (s² + 2ζs + 1)`, in the normalised time x = ωn·t. Divide a
normalised time by ωn = 2π·fn for seconds. Damping ratios are positive; ζ ≥ 1 is allowed wherever the quantity
exists. The times are those of the exact response: no rule of thumb, no envelope.

Source: Ogata, *Modern Control Engineering*, "Transient response of second-order systems"; logarithmic decrement
as in any text on free vibration. Checked against the published values of `reference_data`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from freqid.errors import EstimationError

__all__ = [
    "checked_damping_ratio",
    "damping_from_decrement",
    "damping_from_half_cycle_peaks",
    "damping_from_overshoot",
    "logarithmic_decrement",
    "normalised_crossing_time",
    "normalised_delay_time_50",
    "normalised_peak_time",
    "normalised_rise_time_0_90",
    "normalised_rise_time_10_90",
    "normalised_settling_time",
    "normalised_step_response",
    "normalised_time_constant",
    "percent_overshoot",
]

Floats = NDArray[np.float64]

# Newton steps need about eight; halving reaches the spacing of doubles sooner than this from any bracket that occurs.
MOST_STEPS = 400


def checked_damping_ratio(damping_ratio: ArrayLike) -> Floats:
    """The damping ratio as an array of doubles.

    Raises
    ------
    EstimationError
        A damping ratio is zero, negative, infinite or NaN.
    """
    ratio = np.asarray(damping_ratio, dtype=np.float64)
    wrong = ~((ratio > 0) & np.isfinite(ratio))
    if np.any(wrong):
        raise EstimationError(
            f"damping_ratio = {ratio[wrong].flat[0]:g}: must be a finite number above 0; "
            "an undamped or growing oscillation has none of the step-test quantities"
        )
    return ratio


def normalised_step_response(normalised_time: ArrayLike, damping_ratio: ArrayLike) -> Floats:
    """Response to a unit step at time 0, final value 1.

    Parameters
    ----------
    normalised_time : array
        ωn·t, any shape; before 0 the response is 0.
    damping_ratio : array
        ζ > 0, broadcast against `normalised_time`.

    Returns
    -------
    array of the broadcast shape, unit 1.

    Notes
    -----
    With q² = ζ² − 1: 1 − e^(−ζx)·(cosh qx + ζ·sinh(qx)/q), written so that it neither overflows for large ζ nor
    loses digits near ζ = 1; below ζ = 1 the hyperbolic functions become circular ones.
    """
    ratio = checked_damping_ratio(damping_ratio)
    time = np.maximum(np.asarray(normalised_time, dtype=np.float64), 0.0)
    missing, _ = _missing_and_slope(time, ratio)
    return np.asarray(1 - missing)


def _missing_and_slope(time: Floats, ratio: Floats) -> tuple[Floats, Floats]:
    """What is missing to the final value, and the slope of the response."""
    root = np.sqrt(np.abs((ratio - 1) * (ratio + 1)))
    if np.all(ratio < 1):
        even, odd = _circular(time, ratio, root)
    elif np.all(ratio >= 1):
        even, odd = _hyperbolic(time, ratio, root)
    else:
        even, odd = np.where(ratio < 1, _circular(time, ratio, root), _hyperbolic(time, ratio, root))
    return even + ratio * odd, odd


def _circular(time: Floats, ratio: Floats, root: Floats) -> tuple[Floats, Floats]:
    """e^(−ζx)·cos qx and e^(−ζx)·sin(qx)/q."""
    decay = np.exp(-ratio * time)
    return decay * np.cos(root * time), decay * time * np.sinc(root * time / np.pi)


def _hyperbolic(time: Floats, ratio: Floats, root: Floats) -> tuple[Floats, Floats]:
    """e^(−ζx)·cosh qx and e^(−ζx)·sinh(qx)/q through the two real poles."""
    slow = np.exp(-time / (ratio + root))
    fast = np.exp(-time * (ratio + root))
    safe_root = np.where(root > 0, root, 1.0)
    shape = np.where(root > 0, -np.expm1(-2 * root * time) / (2 * safe_root), time)
    return (slow + fast) / 2, slow * shape


def percent_overshoot(damping_ratio: ArrayLike) -> Floats:
    """Overshoot in percent of the final value: 100·exp(−πζ/√(1−ζ²)), 0 for ζ ≥ 1."""
    return 100 * _half_cycle_ratio(checked_damping_ratio(damping_ratio))


def _half_cycle_ratio(ratio: Floats) -> Floats:
    """Each extreme's distance from the final value over that of the one before; 0 for ζ ≥ 1."""
    return np.asarray(np.where(ratio < 1, np.exp(-np.pi * ratio / _damped_frequency(ratio)), 0.0))


def _damped_frequency(ratio: Floats) -> Floats:
    """ωd/ωn; 1 stands in where there is no oscillation, for the callers to mask."""
    return np.where(ratio < 1, np.sqrt(np.abs((1 - ratio) * (1 + ratio))), 1.0)


def normalised_peak_time(damping_ratio: ArrayLike) -> Floats:
    """ωn·t of the first peak, π/√(1−ζ²); NaN for ζ ≥ 1, where there is none."""
    ratio = checked_damping_ratio(damping_ratio)
    return np.asarray(np.where(ratio < 1, np.pi / _damped_frequency(ratio), np.nan))


def normalised_time_constant(damping_ratio: ArrayLike) -> Floats:
    """ωn times the time constant of the envelope, 1/ζ (for ζ > 1 the mean rate of the two poles, not the slow one)."""
    return np.asarray(1 / checked_damping_ratio(damping_ratio))


def normalised_crossing_time(damping_ratio: ArrayLike, level: ArrayLike) -> Floats:
    """ωn·t at which the response first reaches `level`.

    Parameters
    ----------
    damping_ratio : array
        ζ > 0.
    level : array
        Fraction of the final value, 0 ≤ level ≤ 1, broadcast against `damping_ratio`.

    Returns
    -------
    array of the broadcast shape, unit 1; NaN at level 1 for ζ ≥ 1, where it is never reached.

    Raises
    ------
    EstimationError
        A level lies outside [0, 1].
    """
    fraction = np.asarray(level, dtype=np.float64)
    wrong = ~((fraction >= 0) & (fraction <= 1))
    if np.any(wrong):
        raise EstimationError(f"level = {fraction[wrong].flat[0]:g}: give a fraction of the final value from 0 to 1")
    ratio, fraction = np.broadcast_arrays(checked_damping_ratio(damping_ratio), fraction)
    never = (ratio >= 1) & (fraction == 1)
    reached = np.where(never, 0.0, fraction)
    crossing = _time_of(1 - reached, ratio, np.zeros(ratio.shape), _rise_end(ratio, reached))
    return np.asarray(np.where(never, np.nan, np.where(fraction > 0, crossing, 0.0)))


def _rise_end(ratio: Floats, level: Floats) -> Floats:
    """A time by which the level has been reached while the response still rises.

    Below ζ = 1 that is the first peak. From ζ = 1 on the response lies above that of two equal lags with the slow
    pole's rate p, so what is missing is at most (1+px)·e^(−px) ≤ 2·e^(−px/2), which is 1 − level at the time returned.
    """
    slow_time_constant = ratio + np.sqrt(np.maximum((ratio - 1) * (ratio + 1), 0.0))
    missing = np.where(ratio < 1, 1.0, 1 - level)
    return np.where(ratio < 1, np.pi / _damped_frequency(ratio), 2 * np.log(2 / missing) * slow_time_constant)


def _time_of(missing: Floats, ratio: Floats, start: Floats, end: Floats) -> Floats:
    """When the distance to the final value has come down to `missing`, between an extreme at `start` and `end`.

    `missing` is negative where the response comes from above. Newton's method inside a shrinking bracket: where a
    step leaves the bracket or does not halve the one before the last, the bracket is halved instead.
    """
    side = np.where(missing < 0, -1.0, 1.0)
    low, high, time = start, end, start + (end - start) / 2
    last = before_last = high - low
    done = np.zeros(np.shape(time), dtype=bool)
    for _ in range(MOST_STEPS):
        distance, slope = _missing_and_slope(time, ratio)
        excess, rate = side * (distance - missing), side * slope
        low, high = np.where(excess > 0, time, low), np.where(excess > 0, high, time)
        newton = excess / np.where(rate == 0, np.inf, rate)
        inside = (time + newton >= low) & (time + newton <= high) & (2 * np.abs(newton) <= np.abs(before_last))
        move = np.where(inside & (rate != 0), newton, low + (high - low) / 2 - time)
        before_last, last = last, move
        time = np.where(done, time, time + move)
        done |= np.abs(move) <= np.spacing(time)
        if np.all(done):
            break
    return np.asarray(time)


def normalised_delay_time_50(damping_ratio: ArrayLike) -> Floats:
    """ωn times the delay time: from the step to 50 % of the final value."""
    return normalised_crossing_time(damping_ratio, 0.5)


def normalised_rise_time_0_90(damping_ratio: ArrayLike) -> Floats:
    """ωn times the rise time from the onset to 90 % of the final value."""
    return normalised_crossing_time(damping_ratio, 0.9)


def normalised_rise_time_10_90(damping_ratio: ArrayLike) -> Floats:
    """ωn times the rise time from 10 % to 90 % of the final value."""
    return np.asarray(normalised_crossing_time(damping_ratio, 0.9) - normalised_crossing_time(damping_ratio, 0.1))


def normalised_settling_time(damping_ratio: ArrayLike, band: float) -> Floats:
    """ωn·t after which the response stays within ± `band` of the final value.

    Parameters
    ----------
    damping_ratio : array
        ζ > 0.
    band : float
        Half-width of the band as a fraction of the final value, between 0 and 1: 0.05 or 0.02 by custom.

    Returns
    -------
    array, unit 1. As a function of ζ it jumps down wherever an extreme comes to lie exactly on the edge of the band.

    Raises
    ------
    EstimationError
        The band does not lie between 0 and 1.

    Notes
    -----
    The k-th extreme, at x = kπ/√(1−ζ²), lies OS^k from the final value (OS: overshoot as a fraction, k = 0: the
    start). The response enters the band for good between the last extreme outside it and the next one.
    """
    if not 0 < band < 1:
        raise EstimationError(f"band = {band}: give a fraction of the final value between 0 and 1, such as 0.05")
    ratio = checked_damping_ratio(damping_ratio)
    half_cycle = np.pi / _damped_frequency(ratio)
    last = np.where(ratio < 1, np.ceil(-np.log(band) / (ratio * half_cycle)) - 1, 0.0)
    side = np.where(last % 2 == 0, 1.0, -1.0)
    start = last * half_cycle
    end = np.where(ratio < 1, start + half_cycle, _rise_end(ratio, np.asarray(1 - band)))
    return _time_of(side * band, ratio, start, end)


def logarithmic_decrement(damping_ratio: ArrayLike) -> Floats:
    """ln of the ratio of two successive peaks on the same side, 2πζ/√(1−ζ²); NaN for ζ ≥ 1."""
    ratio = checked_damping_ratio(damping_ratio)
    return np.asarray(np.where(ratio < 1, 2 * np.pi * ratio / _damped_frequency(ratio), np.nan))


def damping_from_overshoot(overshoot: ArrayLike) -> Floats:
    """Damping ratio from the overshoot in percent: L/√(π²+L²) with L = ln(100/overshoot).

    100 % gives 0. NaN outside (0, 100]: no overshoot says only ζ ≥ 1 (or too little to be seen), more than 100 % is
    not this system.
    """
    percent = np.asarray(overshoot, dtype=np.float64)
    inside = (percent > 0) & (percent <= 100)
    return _damping_from_half_cycle_decrement(np.log(100 / np.where(inside, percent, np.nan)))


def damping_from_decrement(decrement: ArrayLike) -> Floats:
    """Damping ratio from the logarithmic decrement of one full cycle: δ/√(4π²+δ²); negative for a growing motion."""
    return _damping_from_half_cycle_decrement(np.asarray(decrement, dtype=np.float64) / 2)


def damping_from_half_cycle_peaks(first: ArrayLike, second: ArrayLike) -> Floats:
    """Damping ratio from two successive extremes on opposite sides, half a cycle apart.

    `first` and `second` are their distances from the rest position, both positive and in the same unit; NaN where
    one is not. A motion that grows from the first to the second has a negative damping ratio.
    """
    first_peak, second_peak = np.asarray(first, dtype=np.float64), np.asarray(second, dtype=np.float64)
    usable = (first_peak > 0) & (second_peak > 0)
    peak_ratio = np.where(usable, first_peak, np.nan) / np.where(usable, second_peak, np.nan)
    return _damping_from_half_cycle_decrement(np.log(peak_ratio))


def _damping_from_half_cycle_decrement(decrement: Floats) -> Floats:
    """ζ = L/√(π²+L²), the inverse of L = πζ/√(1−ζ²)."""
    return np.asarray(decrement / np.hypot(np.pi, decrement))
