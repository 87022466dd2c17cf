"""How large may an excitation be?

As large as three limits allow: the voltage (the bias counts on the side where it stands, and where the
output is smooth the peaks between the samples count too), the slew rate, and the swing of every rig that the
true one may be, transients included. All three are proportional to the departure from the bias, so one scale
answers.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np

from excitation.errors import ExcitationError, LimitExceeded
from excitation.limits import Limits
from excitation.profile import Floats, Profile
from excitation.rig_model import RigModel
from excitation.swing import check_margin, fast_length, worst_swing

__all__ = ["Allowance", "largest_allowance", "scaled_to_limits"]

_ROUNDING = 1 - 1e-9  # keeps floating-point rounding of the scaled samples inside the limits
_FINER = 4  # points per sample of a smooth voltage: its peaks between the samples count too


@dataclass(frozen=True, slots=True, kw_only=True)
class Allowance:
    """The largest scale of a profile's departure from the bias, and which limit sets it."""

    scale: float = field(metadata={"unit": "1"})
    limited_by: Literal["voltage", "slew rate", "swing"]


def largest_allowance(
    profile: Profile, limits: Limits, rigs: Sequence[RigModel] = (), *, margin: float = 0.9
) -> Allowance:
    """Largest factor by which the departure from the bias may be multiplied.

    Parameters
    ----------
    rigs : sequence of RigModel
        All that the true rig may be; without any, the swing is not limited.
    margin : float
        The part of the way to the stops that may be used, above 0 and at most 1.

    Raises
    ------
    ExcitationError
        The profile never leaves its bias, or stands on another bias than the limits.
    """
    check_margin(margin)
    if profile.bias != limits.bias:
        raise ExcitationError(
            f"bias: the profile stands on {profile.bias:g} V, the limits on {limits.bias:g} V; give both the same"
        )
    if profile.peak_voltage == 0:
        raise ExcitationError("voltage: the profile never leaves its bias; there is nothing to scale")
    allowances = [
        Allowance(scale=_voltage_scale(profile, limits), limited_by="voltage"),
        Allowance(scale=limits.slew_rate / profile.max_slew_rate, limited_by="slew rate"),
    ]
    if rigs:
        swing = worst_swing(profile, rigs)
        scale = margin * limits.angle / swing if swing > 0 else np.inf
        allowances.append(Allowance(scale=float(scale), limited_by="swing"))
    return min(allowances, key=lambda allowance: allowance.scale)


def scaled_to_limits(
    profile: Profile,
    limits: Limits,
    rigs: Sequence[RigModel] = (),
    *,
    margin: float = 0.9,
    amplitude: float | None = None,
) -> Profile:
    """The profile at the largest amplitude the limits allow, or at the one asked for.

    Parameters
    ----------
    amplitude : float or None
        Peak departure from the bias in V; None for the largest allowed.

    Raises
    ------
    LimitExceeded
        The amplitude asked for passes a limit; says which, and the largest amplitude that would not.
    """
    allowance = largest_allowance(profile, limits, rigs, margin=margin)
    largest = allowance.scale * _ROUNDING * profile.peak_voltage
    if amplitude is not None:
        _check_amplitude(amplitude, largest, allowance, limits=limits, margin=margin)
    chosen = largest if amplitude is None else amplitude
    deviation = (profile.voltage - profile.bias) * (chosen / profile.peak_voltage)
    limited_by = allowance.limited_by if amplitude is None else "amplitude asked for"
    scaled = replace(
        profile,
        voltage=profile.bias + deviation,
        settings={**profile.settings, "amplitude_V": chosen, "amplitude_limited_by": limited_by},
    )
    limits.check_profile(scaled)
    return scaled


def _check_amplitude(
    amplitude: float, largest: float, allowance: Allowance, *, limits: Limits, margin: float
) -> None:
    if not (np.isfinite(amplitude) and amplitude > 0):
        raise ExcitationError(f"amplitude: {amplitude} V; it must be above 0")
    if amplitude > largest:
        figures = {
            "voltage": f"the peak may be {limits.voltage:g} V",
            "slew rate": f"it would change faster than {limits.slew_rate:g} V/s",
            "swing": f"the predicted swing would be {margin * limits.angle * amplitude / largest:.3g} of "
            f"{margin * limits.angle:.3g} allowed ({margin:g} of the stops at {limits.angle:g})",
        }[allowance.limited_by]
        raise LimitExceeded(
            f"amplitude: {amplitude:.6g} V asked for, but {figures}; "
            f"ask for at most {largest:.6g} V, or leave it to the design"
        )


def _voltage_scale(profile: Profile, limits: Limits) -> float:
    departure = profile.voltage - profile.bias
    if profile.hold == "smooth":
        departure = np.concatenate([departure, _between_samples(departure)])
    up, down = float(np.max(departure)), float(-np.min(departure))
    scales = [(limits.voltage - limits.bias) / up] if up > 0 else []
    scales += [(limits.voltage + limits.bias) / down] if down > 0 else []
    return min(scales)


def _between_samples(departure: Floats) -> Floats:
    """The band-limited signal through the samples, at a finer step: a smooth output passes through these too."""
    n_padded = fast_length(departure.size)
    return np.asarray(np.fft.irfft(np.fft.rfft(departure, n_padded), _FINER * n_padded) * _FINER)
