"""Do the steps go both ways, settle, and stay inside the limits?"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from spring_vane import Vane

from excitation import (
    ExcitationError,
    LimitExceeded,
    Limits,
    Profile,
    StepSettings,
    design_step_sequence,
    predicted_swing,
    settling_time,
)


def _settings(limits: Limits, **changes: Any) -> StepSettings:
    return StepSettings(**{"sample_rate": 200.0, "limits": limits, **changes})


def test_default_goes_up_and_down_on_both_sides(limits: Limits) -> None:
    """Eight steps of one size, levels +, 0, -, 0 held 4 s each, from and to the bias."""
    profile = design_step_sequence(_settings(replace(limits, slew_rate=math.inf, bias=1.0)))
    levels = profile.voltage[200:].reshape(8, 800)
    assert np.all(levels == levels[:, :1])
    np.testing.assert_allclose(levels[:, 0] - 1.0, 4.0 * np.tile([1, 0, -1, 0], 2), rtol=0, atol=1e-8)
    assert np.all(profile.voltage[:200] == 1.0)
    assert np.all(levels[1::2, 0] == 1.0)


def test_ramp_is_as_short_as_the_slew_rate_allows(limits: Limits) -> None:
    """5 V at 250 V/s and 200 Hz, 1.25 V a sample, take 4 samples: one fewer would pass the limit."""
    profile = design_step_sequence(_settings(replace(limits, slew_rate=250.0)))
    np.testing.assert_allclose(profile.voltage[199:205], [0, 1.25, 2.5, 3.75, 5.0, 5.0], rtol=0, atol=1e-8)
    assert profile.max_slew_rate <= 250.0


def test_smaller_step_takes_a_shorter_ramp(limits: Limits, vane: Vane) -> None:
    """Where the stops allow 1.3 V only, the ramp is that of 1.3 V, not of the 5 V the voltage limit would allow."""
    profile = design_step_sequence(_settings(replace(limits, slew_rate=50.0), rigs=[vane]))
    assert profile.settings["ramp_samples"] == math.ceil(profile.peak_voltage * 200.0 / 50.0)
    assert profile.max_slew_rate > 40.0


def test_smooth_steps_keep_the_limit_between_the_samples(limits: Limits) -> None:
    """The band-limited signal through the samples of a smooth output stays inside the voltage limit."""
    profile = design_step_sequence(_settings(limits, hold="smooth"))
    finer = np.fft.irfft(np.fft.rfft(profile.voltage), 16 * profile.voltage.size) * 16
    # the design looks at 4 points per sample; ripple of half the sample rate is missed by 1 - cos(pi/8) = 8 % of
    # itself at most, and the ripple is some 2e-3 of the step
    assert 4.98 < np.max(np.abs(finer)) < 5.0 * (1 + 0.08 * 2e-3)
    assert profile.max_slew_rate <= 500.0


@pytest.mark.parametrize("hold", ["zero-order", "smooth"])
def test_swing_with_overshoot_uses_the_margin(limits: Limits, vane: Vane, hold: str) -> None:
    """The largest step lets the vane overshoot to 0.9 of its stops, whatever ramp the step then needs."""
    profile = design_step_sequence(_settings(limits, rigs=[vane], hold=hold))
    assert 27.0 * (1 - 1e-6) < predicted_swing(profile, vane) <= 27.0
    overshoot = math.exp(-math.pi * 0.12 / math.sqrt(1 - 0.12**2))
    # a ramp of r samples lowers the overshoot by about (pi fn r / fs)^2 / 6: 1.5e-4 of it for 2 samples, 1 % for 13;
    # 2e-3 is what the prediction of the swing leaves out, and later steps start from a level settled to 0.3 %
    assert profile.peak_voltage == pytest.approx(27.0 / 12.0 / (1 + overshoot), rel=0.015)


@pytest.mark.parametrize("damping_ratio", [0.05, 0.12, 0.5, 1.0, 2.0])
def test_settling_time_of_the_vane(damping_ratio: float) -> None:
    """Settled to 1 % where the exact step response enters its band for good."""
    rig = Vane(damping_ratio=damping_ratio)
    step = Profile(voltage=np.ones(8000), sample_rate=1000.0, hold="zero-order", bias=0.0, kind="step")
    exact = rig.motion(step)[:, 0]
    entered = np.flatnonzero(np.abs(exact / rig.gain - 1) > 0.01)[-1] / 1000.0
    # the band is entered at a slope that makes 1e-4 of the final value some ms; a lobe that just touches the band
    # makes at most half a period of difference, 1/6 s
    assert settling_time(rig) == pytest.approx(entered, abs=0.17 if damping_ratio < 1 else 0.02)


def test_levels_are_held_until_settled(limits: Limits, vane: Vane) -> None:
    """Every level lasts half as long again as the slowest rig takes to settle."""
    slower = replace(vane, damping_ratio=0.06)
    profile = design_step_sequence(_settings(limits, rigs=[vane, slower]))
    assert profile.settings["hold_time_s"] == pytest.approx(1.5 * settling_time(slower), abs=0.005)


def test_duration_is_filled_with_whole_pairs_of_steps(limits: Limits) -> None:
    """In 30 s with levels of 4 s and 1 s before there is room for 7 levels: 6 are used, the rest is rest."""
    profile = design_step_sequence(_settings(limits, duration=30.0))
    assert profile.voltage.size == 6000
    assert profile.settings["step_times_s"] == [1.0, 5.0, 9.0, 13.0, 17.0, 21.0]
    assert np.all(profile.voltage[21 * 200 + 20 :] == 0.0)


def test_bad_settings_are_refused(limits: Limits, vane: Vane) -> None:
    """Too short, too slow, never settling, or beyond the stops: each is told with figures."""
    with pytest.raises(ExcitationError, match="take at least 9 s"):
        design_step_sequence(_settings(limits, duration=8.0))
    with pytest.raises(ExcitationError, match="over half the hold time"):
        design_step_sequence(_settings(replace(limits, slew_rate=1.0)))
    with pytest.raises(ExcitationError, match="has not settled"):
        settling_time(replace(vane, damping_ratio=1e-5))
    with pytest.raises(ExcitationError, match="hold_time: 0"):
        design_step_sequence(_settings(limits, hold_time=0.0))
    with pytest.raises(ExcitationError, match="sample_rate: 0"):
        design_step_sequence(_settings(limits, sample_rate=0.0))
    with pytest.raises(ExcitationError, match="amplitude: 0"):
        design_step_sequence(_settings(limits, amplitude=0.0))
    with pytest.raises(LimitExceeded, match=r"3 V asked for, but the predicted swing .* ask for at most 1\.3\d* V"):
        design_step_sequence(_settings(limits, amplitude=3.0, rigs=[vane]))
