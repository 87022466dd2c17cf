"""Are the limits of the rig exact, and are refusals told with figures?"""

from __future__ import annotations

import math

import pytest

from excitation import (
    ExcitationError,
    LimitExceeded,
    Limits,
    Profile,
    largest_allowance,
    scaled_to_limits,
)


def _profile(voltage: list[float], *, bias: float = 0.0) -> Profile:
    return Profile(voltage=voltage, sample_rate=10.0, hold="zero-order", bias=bias, kind="other")


def test_limits_themselves_are_allowed() -> None:
    """A sample at the voltage limit and a change at the slew-rate limit pass."""
    limits = Limits(voltage=5.0, slew_rate=25.0, angle=1.0)
    limits.check_profile(_profile([0.0, 2.5, 5.0, 2.5, 0.0, -2.5, -5.0, -2.5, 0.0]))


def test_first_sample_beyond_the_voltage_is_named() -> None:
    """The refusal names sample, time, value, limit and how many break it."""
    limits = Limits(voltage=5.0, slew_rate=math.inf, angle=1.0)
    with pytest.raises(LimitExceeded, match=r"sample 1 \(at 0\.1 s\) is -5\.5 V, the limit is ±5 V \(2 of 4"):
        limits.check_profile(_profile([0.0, -5.5, 6.0, 0.0]))


def test_bias_counts_into_the_voltage() -> None:
    """4 V from a bias of 1.5 V pass 5 V."""
    limits = Limits(voltage=5.0, slew_rate=math.inf, angle=1.0, bias=1.5)
    with pytest.raises(LimitExceeded, match=r"is 5\.5 V"):
        limits.check_profile(_profile([1.5, 5.5, 1.5], bias=1.5))


def test_first_change_beyond_the_slew_rate_is_named() -> None:
    """The refusal names the sample the change leads into, slew rate and limit; the return to the bias counts."""
    limits = Limits(voltage=5.0, slew_rate=20.0, angle=1.0)
    with pytest.raises(LimitExceeded, match=r"into sample 2 \(at 0\.2 s\).* 30 V/s, the limit is 20 V/s \(1 changes"):
        limits.check_profile(_profile([0.0, 1.0, -2.0, 0.0]))
    with pytest.raises(LimitExceeded, match=r"into sample 2 \(at 0\.2 s\).* 40 V/s"):
        limits.check_profile(_profile([2.0, 4.0]))


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ((0.0, 1.0, 1.0), "voltage is 0"),
        ((1.0, -1.0, 1.0), "slew_rate is -1"),
        ((1.0, 1.0, math.nan), "angle is nan"),
        ((1.0, 1.0, 1.0, 1.0), "bias of 1 V leaves no room"),
    ],
)
def test_impossible_limits_are_refused(values: tuple[float, ...], message: str) -> None:
    """Each impossible limit is named."""
    with pytest.raises(ExcitationError, match=message):
        Limits(*values)


def test_scale_uses_the_room_on_each_side_of_the_bias() -> None:
    """About +1 V within ±5 V there are 4 V upward and 6 V downward: 0.5 V up and 3 V down may grow twofold."""
    limits = Limits(voltage=5.0, slew_rate=math.inf, angle=1.0, bias=1.0)
    allowance = largest_allowance(_profile([1.0, 1.5, -2.0, 1.0], bias=1.0), limits)
    assert allowance.limited_by == "voltage"
    assert allowance.scale == pytest.approx(2.0, rel=1e-15)


def test_scaled_profile_stands_at_its_limit_and_not_beyond() -> None:
    """Rounding of the scaled samples (1e-16 of 5 V, times the rate) stays within the 1e-9 kept free of the limit."""
    limits = Limits(voltage=5.0, slew_rate=7.0, angle=1.0, bias=1.7)
    scaled = scaled_to_limits(_profile([1.7, 2.0, 1.6, 1.7], bias=1.7), limits)
    assert scaled.settings["amplitude_limited_by"] == "slew rate"
    assert 7.0 * (1 - 2e-9) < scaled.max_slew_rate <= 7.0


def test_amplitude_beyond_a_limit_is_refused_with_the_largest_allowed() -> None:
    """The refusal names the amplitude, the largest one that passes, and the limit that sets it."""
    limits = Limits(voltage=5.0, slew_rate=20.0, angle=1.0)
    profile = _profile([0.0, 1.0, 0.0])
    message = r"3 V asked for, but it would change faster than .* V/s; ask for at most 2 V"
    with pytest.raises(LimitExceeded, match=message):
        scaled_to_limits(profile, limits, amplitude=3.0)
    assert scaled_to_limits(profile, limits, amplitude=1.5).peak_voltage == 1.5


@pytest.mark.parametrize("amplitude", [0.0, -1.0, math.nan])
def test_impossible_amplitude_is_refused(amplitude: float) -> None:
    """An amplitude must be above 0."""
    with pytest.raises(ExcitationError, match="must be above 0"):
        scaled_to_limits(_profile([0.0, 1.0, 0.0]), Limits(1.0, 100.0, 1.0), amplitude=amplitude)


def test_nothing_to_scale_or_another_bias_is_refused() -> None:
    """A profile at rest, and one about another bias than the limits, cannot be scaled."""
    limits = Limits(5.0, 20.0, 1.0)
    with pytest.raises(ExcitationError, match="never leaves its bias"):
        largest_allowance(_profile([0.0, 0.0]), limits)
    with pytest.raises(ExcitationError, match="stands on 1 V, the limits on 0 V"):
        largest_allowance(_profile([1.0, 2.0], bias=1.0), limits)
