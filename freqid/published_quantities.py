"""Which function of the product computes the quantity a published value speaks of?

Inputs carry the names of the reference files. Times in s, frequencies in Hz, angular frequencies in rad/s (the
published examples are in rad/s), overshoots and damping as there. Every entry calls the product; what stands here is
only the arithmetic between its functions and the form of the published example.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Callable, Mapping
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from freqid import resonance_relations, step_relations
from freqid.published_measurements import MEASUREMENT_QUANTITIES
from freqid.published_uncertainties import UNCERTAINTY_QUANTITIES
from freqid.second_order import SecondOrder

__all__ = ["QUANTITIES"]

Floats = NDArray[np.float64]


def _normalised(relation: Callable[[ArrayLike], Floats]) -> Callable[..., float]:
    """A relation of the damping ratio alone."""
    return lambda damping_ratio: float(relation(damping_ratio))


def _timed(relation: Callable[[ArrayLike], Floats]) -> Callable[..., float]:
    """The time in s that belongs to a normalised time."""
    return lambda damping_ratio, angular_frequency: float(relation(damping_ratio)) / angular_frequency


def _settling_time(damping_ratio: float, band: float, angular_frequency: float = 1.0) -> float:
    return float(step_relations.normalised_settling_time(damping_ratio, band)) / angular_frequency


def _crossing_time(damping_ratio: float, level: float, angular_frequency: float = 1.0) -> float:
    return float(step_relations.normalised_crossing_time(damping_ratio, level)) / angular_frequency


def _time_constants(damping_ratio: float, count: float, angular_frequency: float = 1.0) -> float:
    """The envelope rule for settling times: so many time constants."""
    return count * float(step_relations.normalised_time_constant(damping_ratio)) / angular_frequency


def _angular_frequency_from_peak(overshoot: float, peak_time: float) -> float:
    """Natural angular frequency, rad/s, from overshoot in percent and peak time in s."""
    damping_ratio = step_relations.damping_from_overshoot(overshoot)
    return float(step_relations.normalised_peak_time(damping_ratio)) / peak_time


def _crossing_frequency(overshoot: float, level: float, time: float) -> float:
    """Natural frequency, Hz, of the pointer with this overshoot in percent that reaches `level` at `time`."""
    damping_ratio = float(step_relations.damping_from_overshoot(overshoot))
    return _crossing_time(damping_ratio, level) / (2 * math.pi * time)


def _crossing_bandwidth(overshoot: float, level: float, time: float) -> float:
    """−3 dB frequency, Hz, of the same pointer."""
    damping_ratio = step_relations.damping_from_overshoot(overshoot)
    return float(resonance_relations.bandwidth_ratio(damping_ratio)) * _crossing_frequency(overshoot, level, time)


def _natural_from_damped(damped_frequency: float, damping_ratio: float) -> float:
    return damped_frequency * float(step_relations.normalised_peak_time(damping_ratio)) / math.pi


def _damping_from_peak_ratio(first: float, second: float) -> float:
    return float(step_relations.damping_from_half_cycle_peaks(first, second))


def _response(frequency_ratio: float, damping_ratio: float) -> complex:
    model = SecondOrder(gain=1.0, natural_frequency=1.0, damping_ratio=damping_ratio)
    return complex(model.response([frequency_ratio])[0])


def _phase(frequency_ratio: float, damping_ratio: float) -> float:
    return math.degrees(cmath.phase(_response(frequency_ratio, damping_ratio)))


def _pole_part(part: str) -> Callable[..., float]:
    """Real part, or magnitude of the imaginary part, of the poles in rad/s."""

    def value(damping_ratio: float, angular_frequency: float) -> float:
        frequency = angular_frequency / (2 * math.pi)
        pole = SecondOrder(gain=1.0, natural_frequency=frequency, damping_ratio=damping_ratio).poles[0]
        return abs(pole.imag) if part == "imaginary" else pole.real

    return value


def _half_power_damping(damping_ratio: float) -> float:
    """What the half-power width over twice fn returns for a true damping ratio."""
    return float(resonance_relations.half_power_width_ratio(damping_ratio)) / 2


def _half_power_damping_at_peak(damping_ratio: float) -> float:
    """The same over twice the resonance frequency."""
    return _half_power_damping(damping_ratio) / float(resonance_relations.resonance_frequency_ratio(damping_ratio))


def _half_power_damping_squared(damping_ratio: float) -> float:
    """(f₂² − f₁²)/(4 fn²)."""
    upper = float(resonance_relations.upper_half_power_ratio(damping_ratio))
    return (upper**2 - float(resonance_relations.lower_half_power_ratio(damping_ratio)) ** 2) / 4


def _half_power_width(damping_ratio: float, frequency: float) -> float:
    return frequency * float(resonance_relations.half_power_width_ratio(damping_ratio))


def _multisine_crest_factor(n_lines: float, phases: Floats) -> float:
    from excitation.crest_factor import crest_factor_of, multisine_waveform

    harmonics = np.arange(1, int(n_lines) + 1)
    return crest_factor_of(multisine_waveform(np.exp(1j * phases), harmonics=harmonics, n_samples=256 * int(n_lines)))


def _schroeder_crest_factor(n_lines: float) -> float:
    from excitation.crest_factor import schroeder_phases

    return _multisine_crest_factor(n_lines, schroeder_phases(np.ones(int(n_lines))))


def _zero_phase_crest_factor(n_lines: float) -> float:
    return _multisine_crest_factor(n_lines, np.zeros(int(n_lines)))


def _harmonic_advance(order: float, low: float, high: float, duration: float) -> float:
    """How much earlier, in s, harmonic `order` arrives: from the sweep's first zero crossing to its `order`-th.

    The sweep is continued to times before 0, where its phase grows from nothing; crossing n lies where it is nπ.
    """
    from scipy.optimize import brentq

    from excitation.swept_sine import exponential_sweep

    def sweep(time: float) -> float:
        return float(exponential_sweep(np.asarray(time), band=(low, high), duration=duration))

    grid = duration * np.linspace(-3, 1, 400_001)
    positive = exponential_sweep(grid, band=(low, high), duration=duration) > 0
    crossings = np.flatnonzero(positive[1:] != positive[:-1])[[0, int(order) - 1]]
    first, later = (float(brentq(sweep, grid[index], grid[index + 1])) for index in crossings)
    return later - first


@lru_cache(maxsize=32)
def _exposure_response(product: float) -> complex:
    """Mean over the exposure against the angle at its end, for a steady sine; `product` is frequency × exposure."""
    from freqid.held_response import Drive, HeldResponse

    per_period, n_periods = 4000, 12  # straight lines between 4000 points: the voltage is a sine to (2π/4000)²/8
    voltage = np.sin(2 * np.pi * np.arange(per_period * n_periods + 1) / per_period)
    drive = Drive.from_samples(voltage, start=0.0, interval=1 / per_period, smooth=True)
    rig = HeldResponse(drive, 1.0, 0.7)  # the transient has decayed to e^(−2π·0.7·10) before the last period
    time = n_periods - 1 + np.arange(100) / 100 + 0.005
    turn = np.exp(-2j * np.pi * time)
    return complex((rig.mean(time, product) @ turn) / (rig.at(time) @ turn))


@lru_cache(maxsize=32)
def _hold_response(product: float) -> complex:
    """Fundamental of the response to a held sine against the frequency response; `product` is frequency × interval."""
    from freqid.held_response import Drive, HeldResponse

    n_periods = 20
    n_samples = round(n_periods / product)
    voltage = np.sin(2 * np.pi * product * np.arange(n_samples + 1))
    rig = HeldResponse(Drive.from_samples(voltage, start=0.0, interval=product, smooth=False), 1.0, 0.7)
    per_window = 40000  # over ten whole periods: the line spectrum of the staircase folds onto itself only from there
    time = 10 + 10 * (np.arange(per_window) + 0.5) / per_window
    line = 2j * np.mean(rig.at(time) * np.exp(-2j * np.pi * time))
    return complex(line / _response(1.0, 0.7))


def _gain_and_delay(name: str, response: Callable[[float], complex]) -> dict[str, Callable[..., float]]:
    """Gain in 1 and phase in degrees of an averaging operation."""
    return {
        f"{name}_gain": lambda product: abs(response(product)),
        f"{name}_phase": lambda product: math.degrees(cmath.phase(response(product))),
    }


QUANTITIES: Mapping[str, Callable[..., float]] = {
    "normalised_rise_time_10_90": _normalised(step_relations.normalised_rise_time_10_90),
    "normalised_crossing_time": _crossing_time,
    "normalised_peak_time": _normalised(step_relations.normalised_peak_time),
    "normalised_settling_time": _settling_time,
    "percent_overshoot": _normalised(step_relations.percent_overshoot),
    "logarithmic_decrement": _normalised(step_relations.logarithmic_decrement),
    "damping_from_overshoot": lambda overshoot: float(step_relations.damping_from_overshoot(overshoot)),
    "damping_from_decrement": lambda decrement: float(step_relations.damping_from_decrement(decrement)),
    "damping_from_half_cycle_peaks": _damping_from_peak_ratio,
    "resonance_frequency_ratio": _normalised(resonance_relations.resonance_frequency_ratio),
    "resonance_gain_ratio": _normalised(resonance_relations.resonance_gain_ratio),
    "bandwidth_ratio": _normalised(resonance_relations.bandwidth_ratio),
    "quality_factor": _normalised(resonance_relations.quality_factor),
    "half_power_damping": _half_power_damping,
    "half_power_damping_at_peak": _half_power_damping_at_peak,
    "half_power_damping_squared": _half_power_damping_squared,
    "half_power_width": _half_power_width,
    "gain_ratio": lambda frequency_ratio, damping_ratio: abs(_response(frequency_ratio, damping_ratio)),
    "phase": _phase,
    "pole_real_part": _pole_part("real"),
    "pole_imaginary_part": _pole_part("imaginary"),
    "peak_time": _timed(step_relations.normalised_peak_time),
    "rise_time_10_90": _timed(step_relations.normalised_rise_time_10_90),
    "crossing_time": _crossing_time,
    "settling_time": _settling_time,
    "time_constants": _time_constants,
    "peak_value": lambda damping_ratio, final: (
        final * (1 + float(step_relations.percent_overshoot(damping_ratio)) / 100)
    ),
    "angular_frequency_from_peak": _angular_frequency_from_peak,
    "natural_from_damped_frequency": _natural_from_damped,
    "natural_frequency_from_crossing": _crossing_frequency,
    "bandwidth_from_crossing": _crossing_bandwidth,
    "schroeder_crest_factor": _schroeder_crest_factor,
    "zero_phase_crest_factor": _zero_phase_crest_factor,
    "harmonic_advance": _harmonic_advance,
    **_gain_and_delay("exposure", _exposure_response),
    **_gain_and_delay("hold", _hold_response),
    **MEASUREMENT_QUANTITIES,
    **UNCERTAINTY_QUANTITIES,
}
