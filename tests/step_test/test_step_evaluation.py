"""A whole step test: its model, its pooled readings, its refusals and what it tells."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import binom

from freqid.errors import StepTestError
from freqid.quantity import Quantity
from freqid.records import InputStream, Run
from freqid.second_order import PARAMETER_ORDER, SecondOrder
from freqid.step_relations import (
    normalised_crossing_time,
    normalised_peak_time,
    normalised_settling_time,
    percent_overshoot,
)
from freqid.step_test.evaluation import evaluate_steps
from freqid.step_test.step_result import STEP_QUANTITIES, StepResult

Recorder = Callable[..., Run]
SEEDS = 16


@pytest.fixture(scope="module")
def campaign(short_steps: InputStream, vane_model: SecondOrder, recorded: Recorder) -> list[StepResult]:
    """16 step tests on a common clock with noise of 0.1 deg."""
    return [
        evaluate_steps(recorded(short_steps, vane_model, noise=0.1, exposure=0.008, seed=seed)) for seed in range(SEEDS)
    ]


def held(results: list[Quantity | None], truth: float) -> int:
    """How many intervals hold the truth."""
    return sum(q is not None and q.interval_95[0] <= truth <= q.interval_95[1] for q in results)


def test_parameter_intervals_hold_the_truth(campaign: list[StepResult], vane_model: SecondOrder) -> None:
    """Of 64 intervals as many as chance allows at 1e-4, and of 16 for each parameter."""
    counts = [
        held([one.parameters[name] for one in campaign], vane_model.vector[k]) for k, name in enumerate(PARAMETER_ORDER)
    ]
    assert sum(counts) >= binom.ppf(1e-4, 4 * SEEDS, 0.95)
    assert min(counts) >= binom.ppf(1e-4, SEEDS, 0.95)


@pytest.mark.parametrize(
    "name",
    [
        "static_gain",
        "delay_time_50",
        "rise_time_0_90",
        "log_decrement",
        "time_constant",
        "steady_state_error",
        "rise_time_10_90",
        "peak_time",
        "percent_overshoot",
    ],
)
def test_pooled_readings_hold_what_the_true_rig_shows(name: str, campaign: list[StepResult]) -> None:
    """The closed form of the true rig lies in the 95 % interval as often as chance allows at 1e-4."""
    damping, omega = 0.12, 2 * np.pi * 3
    late, half, early = (float(normalised_crossing_time(damping, level)) for level in (0.9, 0.5, 0.1))
    truth = {
        "static_gain": 12.0,
        "delay_time_50": half / omega,
        "rise_time_0_90": late / omega,
        "rise_time_10_90": (late - early) / omega,
        "peak_time": float(normalised_peak_time(damping)) / omega,
        "percent_overshoot": float(percent_overshoot(damping)),
        "log_decrement": 2 * np.pi * damping / np.sqrt(1 - damping**2),
        "time_constant": 1 / (damping * omega),
        "steady_state_error": 0.0,
    }
    assert held([one.quantities[name] for one in campaign], truth[name]) >= binom.ppf(1e-4, SEEDS, 0.95)


def test_settling_time_holds_the_truth_where_a_swing_grazes_the_band(
    short_steps: InputStream, recorded: Recorder
) -> None:
    """At a damping ratio of 0.3 the third extreme reaches 5.2 % of the step: noise decides whether it counts."""
    rig = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.3, delay=0.02)
    truth = float(normalised_settling_time(0.3, 0.05)) / (2 * np.pi * 3)
    found = [
        evaluate_steps(recorded(short_steps, rig, noise=0.05, seed=seed)).quantities["settling_time_5"]
        for seed in range(12)
    ]
    read = [q for q in found if q is not None]
    assert held([*read], truth) >= binom.ppf(1e-4, len(read), 0.95)


def test_every_step_is_there_with_every_name(campaign: list[StepResult], short_steps: InputStream) -> None:
    """Each change of level is read, up and down, and no name is missing."""
    changes = np.abs(np.diff(short_steps.voltage)) > 0
    # a ramp of several samples is one step
    starts = np.flatnonzero(changes[1:] & ~changes[:-1])
    for one in campaign:
        assert len(one.steps) == len(starts)
        assert {s.direction for s in one.steps} == {"up", "down"}
        assert tuple(one.quantities) == STEP_QUANTITIES
        assert all(tuple(s.quantities) == STEP_QUANTITIES for s in one.steps)


def test_a_noiseless_test_gives_the_true_parameters(
    short_steps: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """To 1e-6, on both clocks, with the steady-state error of nothing."""
    for clock in ({}, {"common_clock": False, "clock_ratio": 1.0002, "clock_offset": -0.35}):
        found = evaluate_steps(recorded(short_steps, vane_model, **clock))
        np.testing.assert_allclose(found.model.vector[:3], vane_model.vector[:3], rtol=1e-6)
        error = found.quantities["steady_state_error"]
        assert error is not None
        # the last 30 % of a hold that settles to 1 %: at most 1 % of 10 deg, and a swing averages to a tenth of it
        assert abs(error.value) < 0.01


def test_the_angle_unit_carries_through(short_steps: InputStream, vane_model: SecondOrder, recorded: Recorder) -> None:
    """In rad the gain is in rad/V and smaller by pi / 180; times and ratios stay."""
    run = recorded(short_steps, vane_model, noise=0.3, seed=1)
    in_rad = replace(run, angle=replace(run.angle, angle=np.radians(run.angle.angle), angle_unit="rad"))
    plain, found = evaluate_steps(run), evaluate_steps(in_rad)
    for name, factor in (("static_gain", np.pi / 180), ("percent_overshoot", 1.0), ("delay_time_50", 1.0)):
        first, second = plain.quantities[name], found.quantities[name]
        assert first is not None
        assert second is not None
        # onset and levels come from a fit that stops within some thousandths of an uncertainty
        assert abs(second.value / factor - first.value) < 0.05 * first.standard_uncertainty
    gain = found.quantities["static_gain"]
    assert gain is not None
    assert gain.unit == "rad/V"


def test_a_reversed_sensor_has_a_negative_gain_and_the_same_times(
    short_steps: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Only the gain changes its sign."""
    run = recorded(short_steps, vane_model, noise=0.3, seed=1)
    turned = replace(run, angle=replace(run.angle, angle=-run.angle.angle))
    plain, found = evaluate_steps(run), evaluate_steps(turned)
    for name, sign in (("static_gain", -1), ("percent_overshoot", 1), ("peak_time", 1)):
        first, second = plain.quantities[name], found.quantities[name]
        assert first is not None
        assert second is not None
        assert abs(sign * second.value - first.value) < 0.05 * first.standard_uncertainty


def test_two_clocks_are_told(short_steps: InputStream, vane_model: SecondOrder, recorded: Recorder) -> None:
    """The delay contains the offset."""
    found = evaluate_steps(recorded(short_steps, vane_model, noise=0.3, common_clock=False, clock_offset=-0.3))
    assert "delay_includes_clock_offset" in [c.code for c in found.caveats]
    assert found.model.delay == pytest.approx(0.32, abs=0.005)


def test_an_overdamped_rig_has_no_overshoot_to_read(short_steps: InputStream, recorded: Recorder) -> None:
    """Overshoot nothing, up to what noise could hide; no peak, no decrement, and each absence is explained."""
    rig = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=1.5, delay=0.02)
    found = evaluate_steps(recorded(short_steps, rig, noise=0.1, seed=1))
    overshoot = found.quantities["percent_overshoot"]
    assert overshoot is not None
    assert overshoot.value == 0.0
    assert 0.0 < overshoot.interval_95[1] < 5.0
    for name in ("peak_time", "log_decrement", "time_constant"):
        assert found.quantities[name] is None
        assert f"no_{name}" in [c.code for c in found.caveats]


def test_a_slow_sensor_leaves_the_times_to_the_model(
    short_steps: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """At 20 frames/s a period of 0.33 s has 6.7 frames, fewer than 8: the peak lies between them, and the fitted model
    gives it.
    """
    found = evaluate_steps(recorded(short_steps, vane_model, noise=0.3, sample_rate=20.0, seed=2))
    told = [c.message for c in found.caveats if c.code == "too_few_frames"]
    assert any("6.7 frames per period, 8 are needed" in message for message in told)
    assert found.quantities["peak_time"] == found.derived["peak_time"]
    decrement = found.quantities["log_decrement"]
    assert decrement is not None
    truth = 2 * np.pi * 0.12 / np.sqrt(1 - 0.12**2)
    assert decrement.value == pytest.approx(truth, abs=5 * decrement.standard_uncertainty)
    model = found.derived["peak_time"]
    assert model is not None
    assert model.value == pytest.approx(
        np.pi / (2 * np.pi * 3 * np.sqrt(1 - 0.12**2)), abs=5 * model.standard_uncertainty
    )


def test_an_excitation_without_steps_is_refused(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """A sweep is no step test."""
    with pytest.raises(StepTestError, match=r"no step found: .* use `estimate` for other excitations"):
        evaluate_steps(recorded(short_sweep, vane_model, noise=0.3))


def test_holds_too_short_to_settle_take_the_models_levels(vane_model: SecondOrder, recorded: Recorder) -> None:
    """Three time constants of 0.44 s are needed, half a second is held: no static gain is read, the fit holds the
    truth, and it is told.
    """
    levels = np.repeat([0.0, 1.0] * 12, 250)
    drive = InputStream(time=np.arange(6000) / 500, voltage=levels, hold="zero-order", commanded=True)
    found = evaluate_steps(recorded(drive, vane_model, noise=0.1))
    assert found.quantities["static_gain"] is None
    assert found.static_line is None
    told = [c.message for c in found.caveats if c.code == "unfinished_settling"]
    assert told
    assert "hold each level longer" in told[0]
    for name, truth in zip(PARAMETER_ORDER, vane_model.vector, strict=True):
        q = found.parameters[name]
        assert q is not None
        assert abs(q.value - truth) < 5 * q.standard_uncertainty


def test_holds_of_a_few_frames_are_refused(vane_model: SecondOrder, recorded: Recorder) -> None:
    """A tenth of a second is six frames: nothing can be read; the message says so in one line."""
    levels = np.repeat([0.0, 1.0] * 60, 50)
    drive = InputStream(time=np.arange(6000) / 500, voltage=levels, hold="zero-order", commanded=True)
    with pytest.raises(StepTestError) as told:
        evaluate_steps(recorded(drive, vane_model, noise=0.1))
    assert "but none is held for 12 frames: hold each level longer" in str(told.value)
    assert "\n" not in str(told.value)


def test_a_ramp_is_used_as_it_is(vane_model: SecondOrder, recorded: Recorder) -> None:
    """The voltage rises within 0.1 s, a third of a period: the fit does not mind, the read-offs are those of a step."""
    one = np.concatenate([np.zeros(1500), np.linspace(0, 1, 51)[1:], np.ones(1700), np.linspace(1, 0, 51)[1:]])
    voltage = np.concatenate([one, one, np.zeros(1500)])
    drive = InputStream(time=np.arange(len(voltage)) / 500, voltage=voltage, hold="zero-order", commanded=True)
    found = evaluate_steps(recorded(drive, vane_model, noise=0.05, seed=3))
    assert "ramp_instead_of_step" in [c.code for c in found.caveats]
    assert len(found.steps) == 4
    for name, truth in zip(PARAMETER_ORDER, vane_model.vector, strict=True):
        q = found.parameters[name]
        assert q is not None
        assert abs(q.value - truth) < 5 * q.standard_uncertainty
    overshoot = found.quantities["percent_overshoot"]
    assert overshoot is not None
    assert abs(overshoot.value - float(percent_overshoot(0.12))) < 4 * overshoot.standard_uncertainty
