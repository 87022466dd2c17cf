"""How far will the rig swing, and does it stay clear of its stops?

The angle from the operating point is the departure of the voltage from the bias, held as the converter
holds it, times the response of the rig, back in time: starting and ending transients included. The
record is padded with rest until the ring-down has died away, so that the end does not run into the
start, and the angle is evaluated at 20 points or more per period of its highest significant frequency.

Exact hold: a staircase of steps T has the spectrum of its samples times
sinc(f T) exp(-j pi f T). Source: A. V. Oppenheim, R. W. Schafer, Discrete-Time Signal Processing
(3rd ed., 2010), section 4.8.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from excitation.errors import ExcitationError, LimitExceeded
from excitation.limits import Limits
from excitation.profile import Floats, Hold, Profile
from excitation.rig_model import Complexes, RigModel, response_of

__all__ = [
    "NEGLIGIBLE_TAIL",
    "PredictedAngle",
    "angle_with_rest",
    "check_margin",
    "check_swing",
    "fast_length",
    "hold_response",
    "predicted_angle",
    "predicted_swing",
    "worst_swing",
]

_POINTS_PER_PERIOD = 20  # misses at most 1 - cos(pi/20) = 1.2 % of the peak of the fastest component
_NEGLIGIBLE_ENERGY = 1e-8  # of the angle lies above its highest significant frequency: 1e-4 of its rms
NEGLIGIBLE_TAIL = 1e-3  # of the peak may be left when the padding ends
_PREDICTION_ROUNDING = 1e-3  # by which a swing predicted on another grid, or by another version, may exceed the plan
_MAX_DOUBLINGS = 10  # of the padding, while it stays below so many samples; then what is left is added to the swing
_MOST_SAMPLES = 1 << 23


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PredictedAngle:
    """Angle from the operating point that a profile will cause, ring-down included."""

    time: Floats = field(metadata={"unit": "s"})  # (N,)
    angle: Floats = field(metadata={"unit": "angle_unit"})  # (N,)
    remainder: float = field(metadata={"unit": "angle_unit"})  # largest angle where the padding ends

    @property
    def swing(self) -> float:
        """Peak magnitude; what had not died away when the padding ended is added (it may have run into the start)."""
        return float(np.max(np.abs(self.angle))) + self.remainder


def predicted_angle(profile: Profile, rig: RigModel) -> PredictedAngle:
    """Angle that the profile will cause, from its first sample to the end of the ring-down.

    Raises
    ------
    ExcitationError
        The model of the rig has no finite response at some frequency.
    """
    return _predicted(profile, rig, {})


def _predicted(profile: Profile, rig: RigModel, held: dict[int, Complexes]) -> PredictedAngle:
    """As `predicted_angle`; `held` keeps the spectra of the voltage, by padded length, from one rig to the next."""
    padding = max(1.0, profile.duration / 4)
    for _ in range(_MAX_DOUBLINGS):
        predicted = _angle_with_rest(profile, rig, padding=padding, held=held)
        if predicted.remainder <= NEGLIGIBLE_TAIL * np.max(np.abs(predicted.angle)):
            return PredictedAngle(time=predicted.time, angle=predicted.angle, remainder=0.0)
        padding *= 2
        if (profile.duration + padding) * profile.sample_rate > _MOST_SAMPLES:
            break
    return predicted


def angle_with_rest(profile: Profile, rig: RigModel, *, padding: float) -> PredictedAngle:
    """Angle that the profile will cause if it repeats after a rest of `padding` s or a little more."""
    return _angle_with_rest(profile, rig, padding=padding, held={})


def _angle_with_rest(
    profile: Profile, rig: RigModel, *, padding: float, held: dict[int, Complexes]
) -> PredictedAngle:
    deviation, rate = profile.voltage - profile.bias, profile.sample_rate
    n_padded = fast_length(deviation.size + math.ceil(padding * rate))
    if n_padded not in held:
        held[n_padded] = _held_spectrum(deviation, rate=rate, n_padded=n_padded, hold=profile.hold)
    spectrum = _angle_spectrum(held[n_padded], rig, rate=rate, n_padded=n_padded)
    highest = _highest_significant(spectrum)
    if profile.hold == "zero-order" and _POINTS_PER_PERIOD * highest > n_padded:
        # the staircase has content above half its rate: the same staircase with finer steps shows it
        finer = math.ceil(_POINTS_PER_PERIOD * highest / n_padded)
        steps = np.repeat(deviation, finer) / finer
        fine = _held_spectrum(steps, rate=finer * rate, n_padded=finer * n_padded, hold=profile.hold)
        spectrum = _angle_spectrum(fine, rig, rate=finer * rate, n_padded=finer * n_padded)
        highest = _highest_significant(spectrum)
    n_points = fast_length(max(_POINTS_PER_PERIOD * highest, 1000))
    angle = np.fft.irfft(spectrum[: n_points // 2], n_points) * (n_points / n_padded)
    time = np.arange(n_points, dtype=np.float64) * (n_padded / rate / n_points)
    resting = time > (0.1 * deviation.size + 0.9 * n_padded) / rate
    return PredictedAngle(time=time, angle=angle, remainder=float(np.max(np.abs(angle[resting]), initial=0.0)))


def predicted_swing(profile: Profile, rig: RigModel) -> float:
    """Peak magnitude of the angle from the operating point, in the angle unit of the rig."""
    return predicted_angle(profile, rig).swing


def worst_swing(profile: Profile, rigs: Sequence[RigModel]) -> float:
    """Largest predicted swing over all rigs that the true one may be.

    Raises
    ------
    ExcitationError
        No rig is given.
    """
    if not rigs:
        raise ExcitationError("worst_swing: no model of the rig; give at least one")
    held: dict[int, Complexes] = {}
    return max(_predicted(profile, rig, held).swing for rig in rigs)


def check_swing(profile: Profile, rigs: Sequence[RigModel], limits: Limits, *, margin: float = 0.9) -> float:
    """Pass with the worst predicted swing, or refuse with the figures.

    Parameters
    ----------
    margin : float
        The part of the way to the stops that may be used, above 0 and at most 1. A thousandth more passes, never
        the stops: a profile planned to the margin is predicted again before it is played.

    Raises
    ------
    LimitExceeded
        Says the predicted swing, the stop angle, the margin and the largest scale of the voltage that would pass.
    """
    check_margin(margin)
    swing = worst_swing(profile, rigs)
    allowed = margin * limits.angle
    if swing > min(allowed * (1 + _PREDICTION_ROUNDING), limits.angle):
        scale = math.floor(1e4 * allowed / swing) / 1e4
        raise LimitExceeded(
            f"swing: {swing:.4g} predicted, {allowed:.4g} allowed ({margin:g} of the stops at ±{limits.angle:g}); "
            f"scale the voltage by at most {scale:g}, to {scale * profile.peak_voltage:.4g} V from the bias"
        )
    return swing


def check_margin(margin: float) -> None:
    """Pass, or refuse a margin that is not above 0 and at most 1."""
    if not 0 < margin <= 1:
        raise ExcitationError(f"margin: {margin}; the usable part of the way to the stops is above 0 and at most 1")


def hold_response(frequency: Floats, *, step: float, hold: Hold) -> Complexes:
    """What the hold does to the spectrum of the samples at the frequencies (F,) in Hz; `step` in s, 1 where smooth."""
    if hold == "smooth":
        return np.ones(frequency.shape, dtype=np.complex128)
    return np.asarray(np.sinc(frequency * step) * np.exp(-1j * np.pi * frequency * step))


def _held_spectrum(deviation: Floats, *, rate: float, n_padded: int, hold: Hold) -> Complexes:
    spectrum: Complexes = np.fft.rfft(deviation, n_padded)
    return spectrum if hold == "smooth" else spectrum * hold_response(_grid(rate, n_padded), step=1 / rate, hold=hold)


def _angle_spectrum(held: Complexes, rig: RigModel, *, rate: float, n_padded: int) -> Complexes:
    return held * response_of(rig, _grid(rate, n_padded))


def _grid(rate: float, n_padded: int) -> Floats:
    """Frequencies of the lines of the transform in Hz."""
    return np.arange(n_padded // 2 + 1, dtype=np.float64) * (rate / n_padded)


def _highest_significant(spectrum: Complexes) -> int:
    """Index of the highest line that matters."""
    energy = np.cumsum(np.abs(spectrum[::-1]) ** 2)
    if energy[-1] == 0:
        return 1
    return max(1, int(spectrum.size - 1 - np.searchsorted(energy, _NEGLIGIBLE_ENERGY * energy[-1])))


def fast_length(n: int) -> int:
    """Smallest length not below n that transforms fast: 1, 3, 5 or 9 times a power of two."""
    return min(factor << max(0, math.ceil(math.log2(n / factor))) for factor in (1, 3, 5, 9))
