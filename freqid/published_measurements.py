"""Which function of the product computes the published values that speak of excitation, estimation and comparison?

The second half of `freqid.published_quantities`, under the same rule: every entry calls the functions that serve the
user, and what stands here is the arithmetic between them. Nothing heavy is imported before it is needed.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from freqid import resonance_relations
from freqid.quantity import Quantity, coverage_factor
from freqid.second_order import SecondOrder

if TYPE_CHECKING:
    from freqid.estimate.frequency_response import FrequencyResponse

__all__ = ["MEASUREMENT_QUANTITIES", "SEED", "measured_response", "swept_resonance"]

Floats = NDArray[np.float64]
SEED = 20_250_101  # any will do: the tolerance of a random row covers the scatter over seeds


def _en_number(value: float, reference: float, expanded: float, reference_expanded: float) -> float:
    from freqid.crosscheck.comparison import en_number

    number = en_number(_with_expanded(value, expanded), _with_expanded(reference, reference_expanded))
    return math.nan if number is None else number


def _with_expanded(value: float, expanded: float) -> Quantity:
    return Quantity(
        value=value, unit="1", standard_uncertainty=expanded / 2, interval_95=(value - expanded, value + expanded)
    )


def _mean_of_five(part: str) -> Callable[..., float]:
    """Value or standard uncertainty of the mean of five readings that scatter by far more than they are uncertain."""

    def value(**readings: float) -> float:
        from freqid.step_test.pooling import pool

        mean = pool([_with_expanded(reading, 1e-9) for reading in readings.values()])
        return float(getattr(mean, part))

    return value


def _point(response: complex, variance: float, quantity: str) -> float:
    return float(getattr(measured_response(np.array([1.0]), np.array([response]), variance), quantity)[0])


def measured_response(frequency: Floats, response: NDArray[np.complex128], variance: float) -> FrequencyResponse:
    """A measured response (F,) with the same variance at each frequency; the rest of it plays no part here."""
    from freqid.estimate.frequency_response import FrequencyResponse

    ones = np.ones_like(frequency)
    return FrequencyResponse(
        frequency=frequency, response=response, variance=variance * ones, coherence=ones, noise=ones,
        input_amplitude=ones, degrees_of_freedom=np.inf * ones, angle_unit="deg", method="periodic",
    )  # fmt: skip


def _delayed_response(part: str) -> Callable[..., float]:
    """Gain, or phase in degrees followed continuously from frequency zero, of a rig with delay."""

    def value(frequency: float, natural_frequency: float, damping_ratio: float, delay: float) -> float:
        model = SecondOrder(
            gain=1.0, natural_frequency=natural_frequency, damping_ratio=damping_ratio, delay=delay
        )
        grid = np.linspace(0.0, frequency, 2001)
        return float(getattr(measured_response(grid, model.response(grid), 1.0), part)[-1])

    return value


def _local_polynomial_freedom(half_window: float, order: float) -> float:
    from freqid.estimate.local_polynomial import fit_locally

    n = int(half_window)
    spectra = np.random.default_rng(SEED).standard_normal((4, 2 * n + 1))
    output, drive = spectra[0] + 1j * spectra[1], spectra[2] + 1j * spectra[3]
    return fit_locally(output, drive, np.array([n]), half_window=n, order=int(order)).degrees_of_freedom


@lru_cache(maxsize=8)
def _local_polynomial_noise(half_window: int, order: int) -> tuple[float, float]:
    """Mean estimate of a noise variance of 1, and of the response's squared error over its stated variance."""
    from freqid.estimate.local_polynomial import fit_locally

    n, n_windows = half_window, 4000
    shape = (2, 2, n_windows * (2 * n + 1))
    real, imaginary = np.random.default_rng(SEED).standard_normal(shape)
    drive, noise = (real + 1j * imaginary) / math.sqrt(2)
    centre = n + (2 * n + 1) * np.arange(n_windows)
    fit = fit_locally(drive + noise, drive, centre, half_window=n, order=order)
    return float(np.mean(fit.noise)), float(np.mean(np.abs(fit.response - 1) ** 2 / fit.variance))


def _random_phase_crest_factor(n_lines: float) -> float:
    """Median over 400 draws."""
    from excitation.crest_factor import crest_factor_of, multisine_waveform, random_phases

    rng, count = np.random.default_rng(SEED), int(n_lines)
    harmonics = np.arange(1, count + 1)
    return float(np.median([
        crest_factor_of(multisine_waveform(
            np.exp(1j * random_phases(count, rng=rng)), harmonics=harmonics, n_samples=32 * count
        ))
        for _ in range(400)
    ]))  # fmt: skip


def _lowered_crest_factor(n_lines: float) -> float:
    """After the descent that designs the multisines, from Schroeder's phases."""
    from excitation.crest_factor import crest_factor_of, lower_peak, multisine_waveform, schroeder_phases

    count = int(n_lines)
    harmonics, lines = np.arange(1, count + 1), np.ones(count)
    phases = lower_peak(schroeder_phases(lines), harmonics=harmonics, signals=lines[None, :].astype(complex))
    return crest_factor_of(multisine_waveform(np.exp(1j * phases), harmonics=harmonics, n_samples=128 * count))


def _sweep_spectrum(frequency: float, low: float, high: float, duration: float) -> float:
    """Magnitude of the Fourier integral of an exponential sweep, V/Hz, at 40 samples per shortest period."""
    from excitation.swept_sine import exponential_sweep

    time: Floats = (np.arange(round(40 * high * duration), dtype=np.float64) + 0.5) / (40 * high)
    sweep = exponential_sweep(time, band=(low, high), duration=duration)
    return float(np.abs(sweep @ np.exp(-2j * np.pi * frequency * time))) / (40 * high)


@lru_cache(maxsize=4)
def _sine_covariance(frequency: float, amplitude: float, noise: float, count: int, known: bool) -> Floats:
    """Bound on the covariance of amplitude, phase, offset and (unless known) angular frequency in rad per sample.

    The rig is so fast that it passes the sine unchanged from the second frame on. Its gain stands for the amplitude,
    delay times angular frequency for the phase, the clock ratio times angular frequency for the frequency.
    """
    from excitation.information import SensorSettings, angle_dependences
    from excitation.profile import Profile

    rate, finer = 1000.0, 20
    voltage = np.sin(2 * np.pi * frequency / rate / finer * np.arange(count * finer))
    voltage[-1] = 0.0
    profile = Profile(voltage=amplitude * voltage, sample_rate=rate * finer, hold="smooth", bias=0.0, kind="other")
    rig = SecondOrder(gain=1.0, natural_frequency=4 * rate, damping_ratio=0.7)
    sensor = SensorSettings(sample_rate=rate, exposure=0.0, noise=noise, clock_known=known)
    dependences = angle_dependences(profile, rig, sensor)[:, [0, 3, 4] if known else [0, 3, 4, 5]]
    turn = 2 * math.pi * frequency
    scale = np.array([amplitude, turn, 1.0, turn / rate])[: dependences.shape[1]]
    return np.asarray(noise**2 * np.linalg.inv(dependences.T @ dependences) * np.outer(scale, scale))


def _sine_variance(index: int, *, known: bool = False) -> Callable[..., float]:
    """Variance of one of amplitude, phase, offset, angular frequency of a fitted sine, read 1000 times a second."""
    return lambda frequency, amplitude, noise, count: float(
        _sine_covariance(frequency, amplitude, noise, int(count), known)[index, index]
    )


@lru_cache(maxsize=16)
def swept_resonance(damping_ratio: float, rate: float) -> tuple[float, float, float]:
    """What a linear sweep of `rate` (half-power widths squared per second) shows of a resonance, against a slow one.

    Error of the peak in percent, its lag in half-power widths, error of the half-power width in percent. The envelope
    is a spline through the extremes of the response, each of them a parabola through three samples.
    """
    from scipy.interpolate import CubicSpline

    from excitation.swept_sine import linear_sweep
    from freqid.held_response import Drive, HeldResponse

    width = 2 * damping_ratio  # natural frequency 1 Hz
    low, high, interval = 1 - 8 * width, 1 + 8 * width, 1 / 400
    duration = 16 / (rate * width)
    time: Floats = interval * np.arange(round(duration / interval), dtype=np.float64)
    sweep = linear_sweep(time, band=(low, high), duration=duration)
    drive = Drive.from_samples(sweep, start=0.0, interval=interval, smooth=True)
    swing = np.abs(HeldResponse(drive, 1.0, damping_ratio).at(time))
    at = np.flatnonzero((swing[1:-1] > swing[:-2]) & (swing[1:-1] >= swing[2:])) + 1
    slope, bend = (swing[at + 1] - swing[at - 1]) / 2, swing[at + 1] - 2 * swing[at] + swing[at - 1]
    envelope = CubicSpline(time[at] - interval * slope / bend, swing[at] - slope**2 / (2 * bend))
    frequency = np.linspace(1 - 4 * width, 1 + 4 * width, 100_001)
    shown = envelope((frequency - low) / (rate * width**2))
    above = frequency[shown > shown.max() / math.sqrt(2)]
    return (
        100 * (float(shown.max() / resonance_relations.resonance_gain_ratio(damping_ratio)) - 1),
        float(frequency[shown.argmax()] - resonance_relations.resonance_frequency_ratio(damping_ratio)) / width,
        100 * (float((above[-1] - above[0]) / resonance_relations.half_power_width_ratio(damping_ratio)) - 1),
    )


def _swept(index: int) -> Callable[..., float]:
    return lambda damping_ratio, rate: swept_resonance(damping_ratio, rate)[index]


MEASUREMENT_QUANTITIES: Mapping[str, Callable[..., float]] = {
    "en_number": _en_number,
    "coverage_factor": lambda degrees_of_freedom: coverage_factor(degrees_of_freedom),
    "mean_of_five": _mean_of_five("value"),
    "uncertainty_of_mean_of_five": _mean_of_five("standard_uncertainty"),
    "gain_uncertainty": lambda gain, variance: _point(gain + 0j, variance, "gain_uncertainty"),
    "phase_uncertainty": lambda gain, variance: _point(gain + 0j, variance, "phase_uncertainty"),
    "delayed_gain": _delayed_response("gain"),
    "delayed_phase": _delayed_response("phase"),
    "local_polynomial_degrees_of_freedom": _local_polynomial_freedom,
    "local_polynomial_noise": lambda half_window, order: _local_polynomial_noise(int(half_window), int(order))[0],
    "local_polynomial_error_ratio": lambda half_window, order: _local_polynomial_noise(int(half_window), int(order))[1],
    "random_phase_crest_factor": _random_phase_crest_factor,
    "lowered_crest_factor": _lowered_crest_factor,
    "sweep_spectrum": _sweep_spectrum,
    "sine_amplitude_variance": _sine_variance(0),
    "sine_phase_variance": _sine_variance(1),
    "sine_offset_variance": _sine_variance(2),
    "sine_angular_frequency_variance": _sine_variance(3),
    "sine_phase_variance_known_frequency": _sine_variance(1, known=True),
    "swept_peak_error": _swept(0),
    "swept_peak_lag": _swept(1),
    "swept_width_error": _swept(2),
}
