"""Is the predicted swing the one the rig makes?"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from spring_vane import Vane

from excitation import ExcitationError, LimitExceeded, Limits, Profile, check_swing, predicted_angle, predicted_swing
from excitation.swing import worst_swing

# what prediction leaves out: 1e-8 of the energy above the highest significant frequency (1e-4 of the rms; 1e-3 of the
# peak where that adds up in phase) and a ring-down of at most 1e-3 of the peak
LEFT_OUT = 2e-3
# peak between points: at 20 points per period of the highest significant frequency 1 - cos(pi/20) at most
BETWEEN_POINTS = 1 - math.cos(math.pi / 20)


def _held(voltage: object, *, rate: float = 200.0, bias: float = 0.0) -> Profile:
    return Profile(voltage=voltage, sample_rate=rate, hold="zero-order", bias=bias, kind="other")


def test_angle_against_exact_motion(vane: Vane) -> None:
    """For a random staircase the whole angle, transients and ring-down included, is that of the matrix exponential."""
    voltage = np.repeat(np.random.default_rng(5).normal(size=40), 25)
    profile = _held(1.0 + voltage, bias=1.0)
    rig = replace(vane, delay=0.02)
    predicted = predicted_angle(profile, rig)
    motion = rig.motion(profile, rest=3.0, finer=4)[:, 0]
    exact_time = np.arange(motion.size) / (4 * profile.sample_rate)
    inside = predicted.time <= exact_time[-1]
    # linear interpolation between exact points 1.25 ms apart: (2 pi 3 Hz 1.25 ms)^2 / 8 = 7e-5 of the peak
    difference = predicted.angle[inside] - np.interp(predicted.time[inside], exact_time, motion)
    peak = np.max(np.abs(motion))
    assert np.max(np.abs(difference)) < (LEFT_OUT + 1e-4) * peak
    assert predicted.swing == pytest.approx(peak, rel=BETWEEN_POINTS)


def test_overshoot_of_a_long_step(vane: Vane) -> None:
    """A step of 2 V swings the vane to K A (1 + exp(-pi zeta / sqrt(1 - zeta^2))): the overshoot of every text."""
    overshoot = math.exp(-math.pi * vane.damping_ratio / math.sqrt(1 - vane.damping_ratio**2))
    profile = _held(np.full(1000, 2.0))
    assert predicted_swing(profile, vane) == pytest.approx(24.0 * (1 + overshoot), rel=LEFT_OUT)


def test_coarse_staircase_between_its_samples(vane: Vane) -> None:
    """At 5 samples per second a 3 Hz vane, above half that rate, swings farthest between the samples."""
    profile = _held(np.random.default_rng(2).normal(size=60), rate=5.0)
    exact = np.max(np.abs(vane.motion(profile, rest=2.0, finer=100)[:, 0]))
    at_samples = np.max(np.abs(vane.motion(profile, rest=2.0)[:, 0]))
    assert at_samples < 0.97 * exact
    assert predicted_swing(profile, vane) == pytest.approx(exact, rel=BETWEEN_POINTS)


def test_slow_ring_down_is_waited_for() -> None:
    """A damping ratio of 0.002 rings on for minutes; the end of the record does not run into its start."""
    rig = Vane(damping_ratio=0.002)
    profile = _held(np.repeat([1.0, -1.0, 1.0, -1.0], 33))
    exact = np.max(np.abs(rig.motion(profile, rest=1.0)[:, 0]))
    # exact points 5 ms apart miss at most 1 - cos(2 pi 3 Hz 2.5 ms) = 1.1e-3 of the peak
    assert predicted_swing(profile, rig) == pytest.approx(exact, rel=BETWEEN_POINTS + 1.2e-3)


def test_undamped_ring_down_only_adds(vane: Vane) -> None:
    """Where the ring-down never ends, what is left is added: the swing is overstated, never understated."""
    rig = replace(vane, damping_ratio=1e-6, natural_frequency=3.01)
    profile = _held(np.repeat([1.0, -1.0], 33))
    assert predicted_swing(profile, rig) > (1 - BETWEEN_POINTS) * np.max(np.abs(rig.motion(profile, rest=1.0)[:, 0]))


def test_smooth_sine_settles_to_the_gain(vane: Vane) -> None:
    """A smooth sine at the natural frequency, faded in, swings to K / (2 zeta) per volt and no farther."""
    time = np.arange(4000) / 200.0
    fade = np.minimum(1.0, np.minimum(time, time[::-1]) / 4.0)
    smooth = 0.5 - 0.5 * np.cos(np.pi * fade)
    profile = Profile(
        voltage=smooth * np.sin(2 * np.pi * 3.0 * time), sample_rate=200.0, hold="smooth", bias=0.0, kind="other"
    )
    # after a fade of 9 time constants and 12 s of full drive nothing of the transient is left within LEFT_OUT
    assert predicted_swing(profile, vane) == pytest.approx(12.0 / 0.24, rel=LEFT_OUT + BETWEEN_POINTS)


def test_swing_is_proportional_and_blind_to_sign(vane: Vane) -> None:
    """Twice the voltage is twice the swing, minus the voltage the same swing."""
    voltage = np.repeat(np.random.default_rng(3).normal(size=20), 30)
    swing = predicted_swing(_held(voltage), vane)
    assert predicted_swing(_held(2 * voltage), vane) == pytest.approx(2 * swing, rel=1e-12)
    assert predicted_swing(_held(-voltage), vane) == pytest.approx(swing, rel=1e-12)


def test_rest_does_not_swing(vane: Vane) -> None:
    """A profile at its bias leaves the rig at its operating point."""
    assert predicted_swing(_held(np.full(100, 2.0), bias=2.0), vane) == 0.0


def test_refusal_holds_every_figure(vane: Vane) -> None:
    """Swing, allowance, margin, stops and the largest scale that passes stand in the refusal; that scale does pass."""
    limits = Limits(voltage=5.0, slew_rate=1e6, angle=30.0)
    profile = _held(np.full(1000, 2.0))
    figures = r"40\.4\d predicted, 27 allowed \(0\.9 of the stops at ±30\).*at most 0\.66"
    with pytest.raises(LimitExceeded, match=figures) as caught:
        check_swing(profile, [vane], limits)
    scale = float(str(caught.value).split("at most ")[1].split(",")[0])
    passed = check_swing(_held(profile.voltage * scale), [vane], limits)
    assert 0.999 * 27 < passed <= 27.0


def test_worst_of_several_rigs_counts(vane: Vane) -> None:
    """The swing of the rig that swings farthest is the one that is judged."""
    profile = _held(np.full(400, 1.0))
    lighter = replace(vane, damping_ratio=0.08)
    assert worst_swing(profile, [vane, lighter]) == predicted_swing(profile, lighter) > predicted_swing(profile, vane)


def test_bad_input_is_refused(vane: Vane) -> None:
    """No rig, an impossible margin, and a rig without a finite response are each told."""
    profile, limits = _held(np.ones(50)), Limits(5.0, 1e6, 30.0)
    with pytest.raises(ExcitationError, match="at least one"):
        worst_swing(profile, [])
    for margin in (0.0, 1.01, math.nan):
        with pytest.raises(ExcitationError, match="margin"):
            check_swing(profile, [vane], limits, margin=margin)
    with pytest.raises(ExcitationError, match="no finite response"):
        predicted_swing(profile, replace(vane, gain=math.nan))


def test_rounding_passes_and_the_stops_do_not(vane: Vane) -> None:
    """A thousandth beyond the margin passes, two do not; with the whole way allowed nothing beyond the stops passes."""
    profile = _held(np.repeat([0.0, 1.0, 0.0], [20, 600, 600]))
    swing = predicted_swing(profile, vane)

    def limits(angle: float) -> Limits:
        return Limits(voltage=5.0, slew_rate=1e6, angle=angle)

    assert check_swing(profile, [vane], limits(swing / 0.9 / 1.0009), margin=0.9) == swing
    with pytest.raises(LimitExceeded):
        check_swing(profile, [vane], limits(swing / 0.9 / 1.0011), margin=0.9)
    with pytest.raises(LimitExceeded):
        check_swing(profile, [vane], limits(swing / 1.0001), margin=1.0)
