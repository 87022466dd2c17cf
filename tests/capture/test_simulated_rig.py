"""The rig in software against independent simulations, its own clock law and the statistics it promises."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from scipy.signal import cont2discrete, dlsim
from scipy.stats import binom, chi2

from excitation import Limits, MultisineSettings, Profile, design_multisine
from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor, input_from_profile, simulate_run
from freqid.records import InputStream, Run
from freqid.rig_template import built_in_vane
from freqid.second_order import SecondOrder

Recorder = Callable[..., Run]
CHANCE = 1e-4  # of a false alarm in a statistical statement


@pytest.mark.parametrize("damping", [0.02, 0.5, 1.0, 2.4])
def test_staircase_equals_the_discrete_time_equivalent(
    damping: float, short_steps: InputStream, recorded: Recorder
) -> None:
    """At the voltage's own instants the zero-order-hold equivalent (scipy) gives the same angle; rounding grows over
    1e4 steps.
    """
    model = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=damping, delay=0.01)
    run = recorded(short_steps, model, sample_rate=500.0)
    wn = 2 * np.pi * model.natural_frequency
    system = ([[0.0, 1.0], [-(wn**2), -2 * damping * wn]], [[0.0], [model.gain * wn**2]], [[1.0, 0.0]], [[0.0]])
    discrete = cont2discrete(tuple(np.array(part) for part in system), 1 / 500, method="zoh")
    _, expected, _ = dlsim(discrete, short_steps.voltage)
    late = 5  # samples: the delay of 10 ms
    n = len(short_steps.time) - late
    np.testing.assert_allclose(run.angle.angle[late : late + n], expected[:n, 0], atol=1e-8)


def test_exposure_is_the_mean_over_many_instants(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Midpoint rule with 80 points in 8 ms: its error is below (0.1 ms)^2 / 24 times the greatest acceleration."""
    rig = SimulatedRig(model=vane_model, sensor=SimulatedSensor(sample_rate=60.0, exposure=0.008))
    end = np.linspace(0.9, 14.0, 37)
    instants = end[:, None] - 0.008 + (np.arange(80) + 0.5) * 1e-4
    mean = rig.angle(short_multisine, instants.ravel(), exposure=0.0).reshape(instants.shape).mean(axis=1)
    # acceleration at most wn^2 (12 deg/V * 5 V + 30 deg), 3.2e4 deg/s^2; a kink in it counts no more
    np.testing.assert_allclose(rig.angle(short_multisine, end, exposure=0.008), mean, atol=3.2e4 * 1e-8 / 24)


@pytest.mark.parametrize(("stamp", "late"), [("start", 0.008), ("middle", 0.004), ("end", 0.0)])
def test_stamp_marks_start_middle_or_end(
    stamp: str, late: float, short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """A stamp at the start means the same exposure as one at the end of a clock set back by the exposure."""
    run = recorded(short_sweep, vane_model, exposure=0.008, stamp=stamp)
    end = recorded(short_sweep, vane_model, exposure=0.008, stamp="end", clock_offset=late)
    n = min(len(run.angle.angle), len(end.angle.angle))
    np.testing.assert_allclose(run.angle.angle[:n], end.angle.angle[:n], atol=1e-9)


def test_stamps_belong_to_true_times_by_ratio_and_offset(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Read at t = offset + ratio * stamp, the angle is that of the voltage's own clock."""
    run = recorded(short_sweep, vane_model, clock_ratio=1.001, clock_offset=-0.4, common_clock=False)
    rig = SimulatedRig(model=vane_model, sensor=SimulatedSensor(sample_rate=60.0, exposure=0.0))
    np.testing.assert_allclose(
        run.angle.angle, rig.angle(short_sweep, -0.4 + 1.001 * run.angle.time, exposure=0.0), atol=1e-9
    )
    assert not run.common_clock
    assert run.simulated


def test_a_seed_repeats_a_run_and_another_does_not(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """To the last bit, everything random included."""
    facts = {"noise": 0.3, "jitter": 0.001, "lost_frames": 0.1}
    first, same, other = (recorded(short_sweep, vane_model, seed=s, **facts) for s in (1, 1, 2))
    np.testing.assert_array_equal(first.angle.time, same.angle.time)
    np.testing.assert_array_equal(first.angle.angle, same.angle.angle)
    assert len(first.angle.time) != len(other.angle.time) or not np.array_equal(first.angle.angle, other.angle.angle)


def test_noise_jitter_and_losses_are_as_loud_as_asked(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Noise by its chi-square, losses by their binomial, jitter by its chi-square: each within chance 1e-4 on either
    side.
    """
    quiet = recorded(short_sweep, vane_model, sample_rate=600.0)
    noisy = recorded(short_sweep, vane_model, sample_rate=600.0, noise=0.3, seed=5)
    n = len(noisy.angle.time)
    low, high = chi2.ppf([CHANCE, 1 - CHANCE], n)
    assert low < np.sum((noisy.angle.angle - quiet.angle.angle) ** 2) / 0.3**2 < high
    lossy = recorded(short_sweep, vane_model, sample_rate=600.0, lost_frames=0.3, seed=6)
    low, high = binom.ppf([CHANCE, 1 - CHANCE], n, 0.7)
    assert low <= len(lossy.angle.time) <= high
    shaky = recorded(short_sweep, vane_model, sample_rate=600.0, jitter=1e-4, seed=7)
    low, high = chi2.ppf([CHANCE, 1 - CHANCE], n)
    assert low < np.sum((shaky.angle.time - quiet.angle.time) ** 2) / 1e-8 < high


def test_jitter_is_told_by_the_stamp(short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder) -> None:
    """A shaken frame is read when its stamp says, so the angle at the stamps is exact."""
    run = recorded(short_sweep, vane_model, jitter=0.002, seed=3)
    rig = SimulatedRig(model=vane_model, sensor=SimulatedSensor(sample_rate=60.0, exposure=0.0))
    np.testing.assert_allclose(run.angle.angle, rig.angle(short_sweep, run.angle.time, exposure=0.0), atol=1e-12)


def test_quantised_angles_are_multiples_and_never_half_a_step_off(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Rounding to the nearest multiple."""
    exact = recorded(short_sweep, vane_model)
    coarse = recorded(short_sweep, vane_model, quantisation=0.5)
    np.testing.assert_allclose(coarse.angle.angle * 2, np.round(coarse.angle.angle * 2), atol=1e-12)
    deviation = np.abs(coarse.angle.angle - exact.angle.angle)
    assert 0 < deviation.max() <= 0.25


def test_rest_angle_and_bias_are_where_the_rig_rests(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """A voltage that stands at a bias moves nothing: the reading there is the rest angle."""
    biased = replace(short_sweep, voltage=short_sweep.voltage + 1.5)
    run = recorded(biased, vane_model, rest_angle=-7.0)
    plain = recorded(short_sweep, vane_model)
    assert run.angle.angle[0] == -7.0
    np.testing.assert_allclose(run.angle.angle + 7.0, plain.angle.angle, atol=1e-9)


def test_the_rig_is_linear_in_the_voltage(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Half the voltage, reversed, gives half the angle, reversed."""
    whole = recorded(short_sweep, vane_model, exposure=0.004)
    half = recorded(replace(short_sweep, voltage=-0.5 * short_sweep.voltage), vane_model, exposure=0.004)
    np.testing.assert_allclose(half.angle.angle, -0.5 * whole.angle.angle, atol=1e-10)


def test_profile_becomes_the_input_it_describes() -> None:
    """Same samples from t = 0; the steady part repeats with the period it names."""
    limits = Limits(voltage=5.0, slew_rate=500.0, angle=30.0, bias=0.5)
    profile = design_multisine(
        MultisineSettings(
            band=(0.5, 8.0), duration=17.0, sample_rate=500.0, limits=limits, phases="schroeder", period=4.0
        )
    )
    stream = input_from_profile(profile)
    assert stream.periodicity is not None
    assert stream.commanded
    assert stream.time[0] == 0.0
    np.testing.assert_array_equal(stream.voltage, profile.voltage)
    p = stream.periodicity
    first, last, period = (round(v * 500) for v in (p.start, p.stop, p.period))
    assert p.n_periods * period == last - first
    np.testing.assert_allclose(stream.voltage[first : last - period], stream.voltage[first + period : last], atol=1e-12)
    spectrum = np.abs(np.fft.rfft(stream.voltage[first:last] - 0.5))
    strong = np.flatnonzero(spectrum > 1e-6 * spectrum.max()) / (last - first) * 500
    np.testing.assert_allclose(strong, p.lines, atol=1e-9)


def test_a_profile_without_a_period_has_none() -> None:
    """A sweep or steps: no periodicity is claimed."""
    stream = input_from_profile(
        Profile(voltage=np.array([0.0, 1.0]), sample_rate=10.0, hold="smooth", bias=0.0, kind="step")
    )
    assert stream.periodicity is None
    assert stream.hold == "smooth"


def test_the_sheet_decides_what_is_simulated() -> None:
    """The rig of `[simulated]`, watched by `[angle_sensor]`."""
    rig = built_in_vane()
    profile = Profile(voltage=np.zeros(200), sample_rate=100.0, hold="zero-order", bias=0.0, kind="other")
    run = simulate_run(profile, rig, kind="step", name="step-001", rng=np.random.default_rng(1))
    described = SimulatedRig.from_sheet(rig)
    assert described.model.natural_frequency == rig.simulated.natural_frequency
    assert described.sensor.exposure == run.angle.exposure == rig.angle_sensor.exposure
    assert (run.kind, run.name, run.angle.stamp) == ("step", "step-001", rig.angle_sensor.stamp)
    assert np.median(np.diff(run.angle.time)) == pytest.approx(1 / rig.angle_sensor.sample_rate, rel=0.05)


def test_a_smooth_voltage_is_smooth_between_its_samples(vane_model: SecondOrder, recorded: Recorder) -> None:
    """The same band-limited voltage given at 500 Hz and at 32 kHz drives the rig alike.

    A cubic spline misses a sine of 8 Hz at 500 Hz by (2 pi f T)^4 / 384, 3e-7 of its size; straight lines miss it by
    (pi f T)^2 / 3, 8e-4. The swing is 30 deg: 1e-4 deg stands between the two.
    """
    limits = Limits(voltage=5.0, slew_rate=500.0, angle=30.0)
    profile = design_multisine(
        MultisineSettings(
            band=(0.5, 8.0),
            duration=17.0,
            sample_rate=32_000.0,
            limits=limits,
            rigs=(vane_model,),
            hold="smooth",
            phases="schroeder",
            period=4.0,
        )
    )
    fine = input_from_profile(profile)
    coarse = replace(fine, time=fine.time[::64], voltage=fine.voltage[::64])
    one, other = recorded(fine, vane_model), recorded(coarse, vane_model)
    n = min(len(one.angle.angle), len(other.angle.angle))
    np.testing.assert_allclose(other.angle.angle[:n], one.angle.angle[:n], atol=1e-4)
