"""How is the time of a test shared between rest, drive and ring-down?

Every profile starts with a rest at the bias, long enough for the onset to be seen in the angle, and ends
with one in which the rig comes to rest. Fades between rest and drive are half a period of a raised cosine.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from excitation.errors import ExcitationError
from excitation.profile import Floats
from excitation.rig_model import RigModel, find_resonance

__all__ = ["check_timing", "fade_in", "lead_in_samples", "ring_down_time"]

_LEAD_IN = 0.5  # s
_LONGEST_LEAD_IN = 0.1  # of the duration
_RING_DOWN = 1.0  # s, where no rig says better
_LONGEST_RING_DOWN = 0.15  # of the duration
_DECAY = math.log(100)  # the ring-down is over at 1 %
_MOST_SAMPLES = 50_000_000


def check_timing(band: tuple[float, float], *, duration: float, sample_rate: float) -> None:
    """Pass, or refuse a band, duration and rate that do not go together.

    Raises
    ------
    ExcitationError
        Says which value, which limit and what to do.
    """
    for name, value, unit in (("duration", duration, "s"), ("sample_rate", sample_rate, "Hz")):
        if not (math.isfinite(value) and value > 0):
            raise ExcitationError(f"{name}: {value} {unit}; it must be above 0")
    low, high = band
    if not (math.isfinite(high) and 0 < low < high):
        raise ExcitationError(f"band: {low:g} to {high:g} Hz; give two frequencies above 0, the lower first")
    if high >= sample_rate / 2:
        raise ExcitationError(
            f"band: the upper edge of {high:g} Hz is not below {sample_rate / 2:g} Hz, half the sample rate; "
            "lower the edge or raise the rate"
        )
    if duration * sample_rate > _MOST_SAMPLES:
        raise ExcitationError(
            f"duration: {duration:g} s at {sample_rate:g} Hz are more than {_MOST_SAMPLES} samples; shorten the test"
        )
    if duration * low < 3:
        raise ExcitationError(
            f"duration: {duration:g} s hold fewer than 3 periods of the lower band edge of {low:g} Hz; "
            f"take at least {3 / low:.3g} s or raise the edge"
        )


def lead_in_samples(n_samples: int, sample_rate: float) -> int:
    """Samples of rest before the drive: half a second, but at most a tenth of all; at least 1."""
    return max(1, min(round(_LEAD_IN * sample_rate), int(_LONGEST_LEAD_IN * n_samples)))


def ring_down_time(rigs: Sequence[RigModel], *, band: tuple[float, float], duration: float) -> float:
    """Rest after the drive in s: until the slowest ring-down has fallen to 1 %, but at most 15 % of the duration.

    The envelope of a resonance with half-power width w decays as exp(-pi w t).
    """
    times = [_RING_DOWN]
    for rig in rigs:
        resonance = find_resonance(rig, band=(band[0] / 4, band[1] * 4))
        if resonance is not None:
            times.append(_DECAY / (math.pi * resonance.half_power_width))
    return min(max(times), _LONGEST_RING_DOWN * duration)


def fade_in(n_samples: int) -> Floats:
    """Weights from 0, included, to 1, excluded, (N,)."""
    return np.asarray(0.5 - 0.5 * np.cos(np.pi * np.arange(n_samples) / n_samples))
