"""How well will this profile measure the rig?

The angle that the sensor will read is predicted for the profile, and with it how each sample depends on
gain, natural frequency, damping ratio and delay: the spectrum of the held voltage times the sensitivity of
the response, averaged over the exposure, back at the instants of the sensor. With white noise of known
rms the Fisher information is the sum of the products of these dependences; its inverse bounds the
covariance of any unbiased estimate. What is measured along with the parameters counts as unknown: the
angle at rest always, the ratio of the two clocks unless it is known.

Sources: G. C. Goodwin, R. L. Payne, Dynamic System Identification: Experiment Design and Data Analysis
(1977), chapter 6; S. M. Kay, Fundamentals of Statistical Signal Processing: Estimation Theory (1993),
chapter 3.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from excitation.errors import ExcitationError
from excitation.profile import Floats, Profile
from excitation.rig_model import Complexes, RigModel, response_of
from excitation.swing import hold_response

__all__ = [
    "PARAMETER_ORDER",
    "PredictedUncertainties",
    "SensorSettings",
    "angle_dependences",
    "predicted_uncertainties",
]

PARAMETER_ORDER = ("gain", "natural_frequency", "damping_ratio", "delay")

_PADDING = 0.5  # of the duration, at rest after the profile
_POINTS_PER_PERIOD = 8  # of the transform's grid, for the highest frequency that is kept
_NEGLIGIBLE_ENERGY = 1e-10  # of the angle may lie above that frequency


@dataclass(frozen=True, slots=True, kw_only=True)
class SensorSettings:
    """What the angle is read with.

    Attributes
    ----------
    sample_rate : float
        Hz.
    exposure : float
        s over which one sample averages the angle, 0 for an encoder.
    noise : float
        rms of white noise per sample, in the angle unit.
    clock_known : bool
        True where sensor and output share a clock; otherwise the ratio of the two is estimated too.
    """

    sample_rate: float = field(metadata={"unit": "Hz"})
    exposure: float = field(metadata={"unit": "s"})
    noise: float = field(metadata={"unit": "angle_unit"})
    clock_known: bool = False

    def __post_init__(self) -> None:
        if not (math.isfinite(self.sample_rate) and self.sample_rate > 0):
            raise ExcitationError(f"sensor: sample_rate is {self.sample_rate} Hz; it must be above 0")
        if not (math.isfinite(self.exposure) and self.exposure >= 0):
            raise ExcitationError(f"sensor: exposure is {self.exposure} s; it must be 0 or more")
        if not (math.isfinite(self.noise) and self.noise > 0):
            raise ExcitationError(f"sensor: noise is {self.noise}; it must be above 0 to predict an uncertainty")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PredictedUncertainties:
    """Standard uncertainties that the profile can reach, absolute; `covariance` (4, 4) in PARAMETER_ORDER."""

    gain: float = field(metadata={"unit": "angle_unit/V"})
    natural_frequency: float = field(metadata={"unit": "Hz"})
    damping_ratio: float = field(metadata={"unit": "1"})
    delay: float = field(metadata={"unit": "s"})
    covariance: Floats

    def relative(self, *, gain: float, natural_frequency: float, damping_ratio: float) -> dict[str, float]:
        """Uncertainties of the first three relative to the given values, and of the delay in s, by name."""
        return {
            "gain": self.gain / abs(gain),
            "natural_frequency": self.natural_frequency / abs(natural_frequency),
            "damping_ratio": self.damping_ratio / abs(damping_ratio),
            "delay": self.delay,
        }


def predicted_uncertainties(profile: Profile, rig: RigModel, sensor: SensorSettings) -> PredictedUncertainties:
    """Smallest standard uncertainties an unbiased estimate from the whole profile can have.

    An unknown offset between the clocks is not told from the delay: `delay` is then that of their sum.

    Raises
    ------
    ExcitationError
        The profile does not determine all four parameters with this sensor.
    """
    dependences = angle_dependences(profile, rig, sensor)
    scales = np.sqrt(np.sum(dependences**2, axis=0))
    if not (np.isfinite(scales).all() and (scales > 0).all()):
        raise ExcitationError("information: the angle does not depend on every parameter; drive the rig harder")
    information = (dependences / scales).T @ (dependences / scales)
    if np.linalg.cond(information) > 1e12:
        raise ExcitationError(
            f"information: {profile.kind} over {profile.duration:.4g} s does not tell the four parameters apart; "
            "widen the band or lengthen the test"
        )
    covariance = sensor.noise**2 * np.linalg.inv(information) / np.outer(scales, scales)
    covariance = np.asarray((covariance + covariance.T)[:4, :4] / 2)
    covariance.flags.writeable = False
    deviations = [float(deviation) for deviation in np.sqrt(np.diag(covariance))]
    return PredictedUncertainties(
        gain=deviations[0],
        natural_frequency=deviations[1],
        damping_ratio=deviations[2],
        delay=deviations[3],
        covariance=covariance,
    )


def angle_dependences(profile: Profile, rig: RigModel, sensor: SensorSettings) -> Floats:
    """How each angle sample depends on each unknown, (N, 5) or (N, 6).

    Columns: the four parameters in PARAMETER_ORDER, the angle at rest, and, unless the clock is known, the ratio
    of the sensor's clock to the output's. Sample n is the mean over the exposure that ends at n / sample_rate.
    """
    spectra = _sensed_spectra(profile, rig, sensor)
    instants = np.arange(math.floor(profile.duration * sensor.sample_rate)) / sensor.sample_rate
    if instants.size < 7:
        raise ExcitationError(
            f"sensor: {instants.size} samples in {profile.duration:.4g} s cannot determine the parameters; "
            "lengthen the test or read the angle faster"
        )
    columns = _at_instants(spectra.values, spectra.resolution, instants)
    rest = np.ones((instants.size, 1))
    if sensor.clock_known:
        return np.hstack([columns[:, :4], rest])
    return np.hstack([columns[:, :4], rest, columns[:, 4:] * instants[:, np.newaxis]])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Spectra:
    values: NDArray[np.complex128]  # (F, 5): Fourier coefficients of the four dependences and of the slope in time
    resolution: float  # Hz


def _sensed_spectra(profile: Profile, rig: RigModel, sensor: SensorSettings) -> _Spectra:
    rate, n_samples = profile.sample_rate, profile.voltage.size
    n_padded = 1 << math.ceil(math.log2((1 + _PADDING) * n_samples + rate))
    frequency: Floats = np.arange(n_padded // 2 + 1, dtype=np.float64) * (rate / n_padded)
    voltage: Complexes = np.fft.rfft(profile.voltage - profile.bias, n_padded) / n_padded
    sensed = voltage * hold_response(frequency, step=1 / rate, hold=profile.hold)
    sensed = sensed * hold_response(frequency, step=sensor.exposure, hold="zero-order")
    response = response_of(rig, frequency)
    energy = np.cumsum(np.abs(sensed * response)[::-1] ** 2)
    kept = frequency.size - int(np.searchsorted(energy, _NEGLIGIBLE_ENERGY * energy[-1]))
    frequency, sensed, response = frequency[:kept], sensed[:kept], response[:kept]
    sensitivity = np.asarray(rig.sensitivity(frequency), dtype=np.complex128)
    slope = 2j * np.pi * frequency * response
    values = np.column_stack([sensitivity, slope]) * sensed[:, np.newaxis]
    return _Spectra(values=values, resolution=rate / n_padded)


def _at_instants(values: NDArray[np.complex128], resolution: float, instants: Floats) -> Floats:
    """Signals with the given Fourier coefficients (F, C) at the instants (N,) in s, (N, C)."""
    from scipy.interpolate import CubicSpline

    n_points = 1 << math.ceil(math.log2(_POINTS_PER_PERIOD * len(values)))
    signals = np.fft.irfft(values, n_points, axis=0) * n_points
    times = np.arange(n_points) / (n_points * resolution)
    return np.asarray(CubicSpline(times, signals, axis=0)(instants))
