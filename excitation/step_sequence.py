"""Which sequence of steps shows gain, overshoot, times and damping, on both sides of the operating point?

    bias, +A, bias, -A, bias, +A, ...

Steps of one size, up and down, on either side; every level is held until the rig has settled to 1 % and
a settled stretch has been seen. A step is a ramp over as few samples as the slew-rate limit needs; where
the output is smooth it is half a period of a raised cosine, so that it does not ring between the samples.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from excitation.amplitude import largest_allowance, scaled_to_limits
from excitation.errors import ExcitationError
from excitation.limits import Limits
from excitation.profile import Floats, Hold, Profile
from excitation.rig_model import RigModel
from excitation.swing import NEGLIGIBLE_TAIL, angle_with_rest

__all__ = ["StepSettings", "design_step_sequence", "settling_time"]

_LEVELS = (1.0, 0.0, -1.0, 0.0)
_DEFAULT_STEPS = 8
_DEFAULT_HOLD = 4.0  # s, without a rig
_SETTLED_BAND = 0.01  # of the step
_SETTLED_PART, _SHORTEST_SETTLED = 0.5, 0.5  # of the settling time; s
_LONGEST_LEAD_IN = 1.0  # s
_SMOOTH_RAMP = 8  # samples at least: content above half the sample rate is then negligible
_LONGEST_SETTLING = 300.0  # s
_STEP_SAMPLES = 2000  # of the step from which the settling time is read
_REFINEMENTS = 20
_CLOSE_ENOUGH = 1e-3  # of the amplitude: the last scaling takes it up, with a ramp longer by as little


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepSettings:
    """What the step test is to be.

    Attributes
    ----------
    sample_rate : float
        Hz.
    limits : Limits
        Of the rig; the bias is among them.
    duration : float or None
        s, in all: as many steps as fit, an even number, the remainder at rest. None for 8 steps.
    hold_time : float or None
        s at each level; None to settle every rig to 1 % and half as long again, 4 s without a rig.
    hold : "zero-order" or "smooth"
        What the output does between the samples.
    rigs : sequence of RigModel
        All that the true rig may be; without any the swing is not limited.
    margin : float
        The part of the way to the stops that may be used.
    amplitude : float or None
        Size of a step in V; None for the largest allowed, overshoot included.
    """

    sample_rate: float = field(metadata={"unit": "Hz"})
    limits: Limits
    duration: float | None = field(default=None, metadata={"unit": "s"})
    hold_time: float | None = field(default=None, metadata={"unit": "s"})
    hold: Hold = "zero-order"
    rigs: Sequence[RigModel] = ()
    margin: float = 0.9
    amplitude: float | None = field(default=None, metadata={"unit": "V"})


@dataclass(frozen=True, slots=True, kw_only=True)
class _StepTiming:
    """Counts in samples, and the number of steps."""

    n_samples: int
    lead: int
    hold: int
    n_steps: int


def settling_time(rig: RigModel) -> float:
    """Time in s after which the step response of the rig stays within 1 % of its final value.

    Raises
    ------
    ExcitationError
        It has not settled after 5 minutes.
    """
    length = 2.0
    while length <= 2 * _LONGEST_SETTLING:
        settled = _settled_within(rig, length=length)
        if settled is not None:
            return settled
        length *= 2
    raise ExcitationError(
        f"hold_time: the rig has not settled to 1 % after {_LONGEST_SETTLING:g} s; "
        "check its damping ratio or set the hold time"
    )


def design_step_sequence(settings: StepSettings) -> Profile:
    """Design the step test: at the bias on both ends, within all limits.

    `settings` of the profile record the size of a step, the hold time, and the time and the level of each step.

    Raises
    ------
    ExcitationError
        The settings do not go together.
    LimitExceeded
        The amplitude asked for passes a limit.
    """
    timing = _choose_timing(settings)
    size = settings.amplitude or settings.limits.voltage - abs(settings.limits.bias)
    for _ in range(_REFINEMENTS):  # a smaller step needs a shorter ramp, which may swing the rig a little further
        unscaled = _sequence(settings, timing, size)
        if settings.amplitude is not None:
            break
        allowance = largest_allowance(unscaled, settings.limits, settings.rigs, margin=settings.margin)
        if allowance.scale >= 1 - _CLOSE_ENOUGH:
            break
        size *= allowance.scale
    return scaled_to_limits(
        unscaled,
        settings.limits,
        settings.rigs,
        margin=settings.margin,
        amplitude=settings.amplitude,
    )


def _settled_within(rig: RigModel, *, length: float) -> float | None:
    """The settling time if it lies in the first half of a step held for `length` s, else None."""
    step = Profile(
        voltage=np.ones(_STEP_SAMPLES), sample_rate=_STEP_SAMPLES / length, hold="zero-order", bias=0.0, kind="step"
    )
    predicted = angle_with_rest(step, rig, padding=length)
    if predicted.remainder > NEGLIGIBLE_TAIL * np.max(np.abs(predicted.angle)):
        return None
    held = predicted.time < length
    angle, time = predicted.angle[held], predicted.time[held]
    final = float(np.mean(angle[time > 0.75 * length]))
    unsettled = np.flatnonzero(np.abs(angle - final) > _SETTLED_BAND * abs(final))
    last = float(time[unsettled[-1]]) if unsettled.size else 0.0
    return last if last < length / 2 else None


def _choose_timing(settings: StepSettings) -> _StepTiming:
    rate = settings.sample_rate
    if not (math.isfinite(rate) and rate > 0):
        raise ExcitationError(f"sample_rate: {rate} Hz; it must be above 0")
    hold_time = _choose_hold_time(settings)
    hold, lead = math.ceil(hold_time * rate), math.ceil(min(hold_time, _LONGEST_LEAD_IN) * rate)
    if settings.duration is None:
        return _StepTiming(n_samples=lead + _DEFAULT_STEPS * hold, lead=lead, hold=hold, n_steps=_DEFAULT_STEPS)
    n_samples = round(settings.duration * rate)
    n_steps = max(0, (n_samples - lead) // hold) // 2 * 2
    if n_steps < 2:
        raise ExcitationError(
            f"duration: {settings.duration:g} s hold fewer than 2 levels of {hold_time:.3g} s; "
            f"take at least {(lead + 2 * hold) / rate:.3g} s"
        )
    return _StepTiming(n_samples=n_samples, lead=lead, hold=hold, n_steps=n_steps)


def _choose_hold_time(settings: StepSettings) -> float:
    if settings.hold_time is not None:
        if not (math.isfinite(settings.hold_time) and settings.hold_time * settings.sample_rate >= 2):
            raise ExcitationError(f"hold_time: {settings.hold_time} s; it must span at least 2 samples")
        return settings.hold_time
    if not settings.rigs:
        return _DEFAULT_HOLD
    settling = max(settling_time(rig) for rig in settings.rigs)
    return settling + max(_SETTLED_PART * settling, _SHORTEST_SETTLED)


def _sequence(settings: StepSettings, timing: _StepTiming, size: float) -> Profile:
    """The sequence with steps of `size` V."""
    rate, bias = settings.sample_rate, settings.limits.bias
    ramp = _ramp(size, settings)
    if ramp.size > timing.hold / 2:
        raise ExcitationError(
            f"slew rate: a step of {size:.4g} V takes {ramp.size / rate:.3g} s at {settings.limits.slew_rate:g} V/s, "
            f"over half the hold time of {timing.hold / rate:.3g} s; take a smaller amplitude or hold longer"
        )
    starts = timing.lead + timing.hold * np.arange(timing.n_steps)
    levels = [_LEVELS[index % len(_LEVELS)] for index in range(timing.n_steps)]
    departure = np.zeros(timing.n_samples)
    for start, before, level in zip(starts, [0.0, *levels], levels, strict=False):
        departure[start:] = size * level
        departure[start : start + ramp.size] = size * (before + (level - before) * ramp)
    return Profile(
        voltage=bias + departure,
        sample_rate=rate,
        hold=settings.hold,
        bias=bias,
        kind="step",
        settings={
            "margin": settings.margin,
            "hold_time_s": timing.hold / rate,
            "ramp_samples": int(ramp.size),
            "step_times_s": [float(start / rate) for start in starts],
            "relative_levels": levels,
        },
    )


def _ramp(size: float, settings: StepSettings) -> Floats:
    """From above 0 to 1 in as few samples as the slew-rate limit allows, (R,)."""
    n_linear = max(1, math.ceil(size * settings.sample_rate / settings.limits.slew_rate * (1 - 1e-9)))
    if settings.hold == "zero-order":
        return np.arange(1, n_linear + 1) / n_linear
    n_smooth = max(_SMOOTH_RAMP, math.ceil(n_linear * np.pi / 2))  # a raised cosine is steepest at pi/2 of the mean
    return np.asarray(0.5 - 0.5 * np.cos(np.pi * np.arange(1, n_smooth + 1) / n_smooth))
