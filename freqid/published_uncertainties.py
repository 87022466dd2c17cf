"""Which function of the product computes the published values that speak of uncertainty and of what a test may miss?

The third part of `freqid.published_quantities`, under the same rule: every entry calls the functions that serve the
user, and what stands here is the arithmetic between them. Nothing heavy is imported before it is needed.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from freqid import resonance_relations, step_relations
from freqid.published_measurements import SEED, measured_response, swept_resonance
from freqid.second_order import SecondOrder

__all__ = ["UNCERTAINTY_QUANTITIES"]

Floats = NDArray[np.float64]
N_WINDOWS = 4000


@lru_cache(maxsize=16)
def _averaged_gain(coherence: float, count: int) -> tuple[float, float]:
    """Uncertainty stated for a gain of 1 averaged over `count` bins, and the scatter found.

    A local fit of order 0 averages its bins but the one that goes into the constant of the leakage: hence one more.
    Schroeder's phases make the sum of n lines √n for odd n, so that it takes exactly that one.
    """
    from excitation.crest_factor import schroeder_phases
    from freqid.estimate.local_polynomial import fit_locally

    n_bins = count + 1
    drive = np.tile(np.exp(1j * schroeder_phases(np.ones(n_bins))), N_WINDOWS)
    real, imaginary = np.random.default_rng(SEED).standard_normal((2, len(drive)))
    noise = math.sqrt((1 - coherence) / coherence / 2) * (real + 1j * imaginary)
    centre = count // 2 + n_bins * np.arange(N_WINDOWS)
    fit = fit_locally(drive + noise, drive, centre, half_window=count // 2, order=0)
    measured = measured_response(np.arange(1.0, N_WINDOWS + 1), fit.response, float(np.mean(fit.variance)))
    return float(measured.gain_uncertainty[0]), float(np.std(measured.gain))


def _confidence_circle(coherence: float, count: float) -> float:
    """Radius of the 95 % region of a complex response of magnitude 1, its variance estimated along."""
    from freqid.derived_uncertainty import joint_radius

    variance = (1 - coherence) / (coherence * (count - 1))
    measured = measured_response(np.array([1.0]), np.array([1.0 + 0j]), variance)
    return joint_radius(2, 2 * (count - 1)) * float(measured.gain_uncertainty[0])


def _impedance_uncertainty(part: Callable[[float], float]) -> Callable[..., float]:
    """Uncertainty in Ω of a part of the ratio of a voltage, V, to a current, mA, with their phase, rad."""

    def value(
        voltage: float, current: float, phase: float,
        u_voltage: float, u_current: float, u_phase: float,
        r_voltage_current: float, r_voltage_phase: float, r_current_phase: float,
    ) -> float:  # fmt: skip
        from freqid.derived_uncertainty import checked_estimate, propagated

        correlation = np.eye(4)
        correlation[[0, 1], [1, 0]] = r_voltage_current
        correlation[[0, 2], [2, 0]] = r_voltage_phase
        correlation[[1, 2], [2, 1]] = r_current_phase
        u = np.array([u_voltage, u_current, u_phase, 0.0])
        readings = checked_estimate([voltage, current, phase, 0.0], correlation * np.outer(u, u), 4.0)
        return propagated(lambda p: 1000 * p[0] / p[1] * part(p[2]), readings, [0, 1, 2])

    return value


def _peak_miss(damping_ratio: float, spacing: float) -> float:
    """Percent by which a peak midway between two lines looks low; `spacing` of the lines in half-power widths."""
    rig = SecondOrder(gain=1.0, natural_frequency=1.0, damping_ratio=damping_ratio)
    peak = float(resonance_relations.resonance_frequency_ratio(damping_ratio))
    beside = peak + spacing * float(resonance_relations.half_power_width_ratio(damping_ratio)) / 2
    gain = abs(complex(rig.response([beside])[0]))
    return 100 * (1 - gain / float(resonance_relations.resonance_gain_ratio(damping_ratio)))


def _settling_frequency(damping_ratio: float, band: float, time: float) -> float:
    """Natural frequency, Hz, of the pointer that stays within `band` from `time` on."""
    return float(step_relations.normalised_settling_time(damping_ratio, band)) / (2 * math.pi * time)


UNCERTAINTY_QUANTITIES: Mapping[str, Callable[..., float]] = {
    "averaged_gain_uncertainty": lambda coherence, count: _averaged_gain(coherence, int(count))[0],
    "averaged_gain_scatter": lambda coherence, count: _averaged_gain(coherence, int(count))[1],
    "confidence_circle": _confidence_circle,
    "resistance_uncertainty": _impedance_uncertainty(math.cos),
    "reactance_uncertainty": _impedance_uncertainty(math.sin),
    "impedance_uncertainty": _impedance_uncertainty(lambda _: 1.0),
    "peak_miss": _peak_miss,
    "swept_peak_delay": lambda damping_ratio, rate: swept_resonance(damping_ratio, rate)[1] / rate,
    "natural_frequency_from_settling": _settling_frequency,
}
