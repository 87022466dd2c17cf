"""Which voltages can every file of a profile hold alike?

Whole numbers of counts of a 32-bit converter, so that CSV, HDF5 and WAV carry the same samples. Zero and the
bias are counts themselves: without a bias a count is full_scale / 2^31; with one it is the bias divided
by the nearest whole number of such counts, which changes the count by less than one part in 40 000.

Every sample is rounded toward the bias, so none passes a voltage limit the unrounded one obeyed. Where
rounding would steepen the steepest change, all is first made smaller by just so much that it does not.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from excitation.errors import ExcitationError, LimitExceeded
from excitation.profile import Floats, Profile

__all__ = ["CountScale", "quantise"]

_FULL_COUNT = 1 << 31
_SMALLEST_BIAS = 20_000  # counts


@dataclass(frozen=True, slots=True, kw_only=True)
class CountScale:
    """What the counts of a file mean in V: count / reference_count * reference_voltage.

    The reference is the bias where there is one, else the full scale: both are then met exactly.
    """

    reference_voltage: float = field(metadata={"unit": "V"})
    reference_count: int

    @classmethod
    def of(cls, *, full_scale: float, bias: float) -> CountScale:
        """Scale of a converter with `full_scale` V at digital full scale, for a profile about `bias` V."""
        if not (math.isfinite(full_scale) and full_scale > 0):
            raise ExcitationError(f"full_scale: {full_scale} V; it must be above 0")
        if bias == 0:
            return cls(reference_voltage=float(full_scale), reference_count=_FULL_COUNT)
        count = round(abs(bias) / full_scale * _FULL_COUNT)
        if count < _SMALLEST_BIAS:
            raise ExcitationError(
                f"bias: {bias:g} V is too small for a full scale of {full_scale:g} V; make it 0, or at least "
                f"{_SMALLEST_BIAS / _FULL_COUNT * full_scale:.2g} V"
            )
        return cls(reference_voltage=float(bias), reference_count=int(math.copysign(count, bias)))

    @property
    def volts_per_count(self) -> float:
        """V per count."""
        return self.reference_voltage / self.reference_count

    def voltage_of(self, counts: NDArray[np.int32] | Floats) -> Floats:
        """Voltage in V of counts (M,): the one place where counts become volts."""
        return np.asarray(counts.astype(np.float64) / self.reference_count * self.reference_voltage)


def quantise(profile: Profile, *, full_scale: float) -> tuple[NDArray[np.int32], CountScale]:
    """Counts (M,) of the profile's samples, and what they mean.

    Neither the largest departure from the bias nor the steepest change is ever larger than in the profile.

    Raises
    ------
    LimitExceeded
        A sample lies beyond the full scale.
    """
    scale = CountScale.of(full_scale=full_scale, bias=profile.bias)
    peak = float(np.max(np.abs(profile.voltage)))
    if peak > full_scale:
        raise LimitExceeded(
            f"full scale: the profile reaches {peak:.6g} V, the output {full_scale:.6g} V; "
            "reduce the amplitude or correct the full scale"
        )
    departure = profile.voltage - profile.bias
    counts = _rounded_toward_bias(departure, profile.bias, scale)
    steepest = float(np.max(np.abs(profile.changes)))
    if _steepest(counts, profile.bias, scale) > steepest:
        shrunk = departure * max(0.0, 1 - 2 * scale.volts_per_count / steepest)
        counts = _rounded_toward_bias(shrunk, profile.bias, scale)
    return counts, scale


def _rounded_toward_bias(departure: Floats, bias: float, scale: CountScale) -> NDArray[np.int32]:
    bias_count = scale.reference_count if bias != 0 else 0
    steps = np.round(departure / scale.volts_per_count)
    counts = np.clip(bias_count + steps, -_FULL_COUNT, _FULL_COUNT - 1)
    # compared in V, as they will be read: a sample that already stands on a count stays there
    excess = np.abs(scale.voltage_of(counts) - bias) > np.abs(departure)
    return np.asarray((counts - excess * np.sign(steps)).astype(np.int32))


def _steepest(counts: NDArray[np.int32], bias: float, scale: CountScale) -> float:
    return float(np.max(np.abs(np.diff(scale.voltage_of(counts), prepend=bias, append=bias))))
