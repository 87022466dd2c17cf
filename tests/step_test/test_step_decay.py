"""Viscous and dry friction told apart by the swings, the static line with its hysteresis, and single steps."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from freqid.records import InputStream, Run
from freqid.second_order import SecondOrder
from freqid.step_relations import damping_from_half_cycle_peaks
from freqid.step_test.envelope import Decay, Extremes, fit_decay
from freqid.step_test.evaluation import evaluate_steps
from freqid.step_test.static_line import fit_static_line

Recorder = Callable[..., Run]


def swings(ratio: float, friction: float, *, first: float = 10.0, u: float = 0.01, seed: int = 1) -> Extremes:
    """Extremes that follow |a[k+1]| = r |a[k]| - f (1 + r), with noise."""
    size = [first]
    while len(size) < 12 and ratio * size[-1] - friction * (1 + ratio) > 0.5:
        size.append(ratio * size[-1] - friction * (1 + ratio))
    noise = u * np.random.default_rng(seed).standard_normal(len(size))
    sign = (-1.0) ** np.arange(len(size))
    return Extremes(
        time=np.arange(len(size)) / 2, deviation=sign * (np.array(size) + noise), uncertainty=np.full(len(size), u)
    )


@pytest.mark.parametrize(
    ("ratio", "friction", "kind"),
    [(0.7, 0.0, "viscous"), (1.0, 0.5, "dry friction"), (0.85, 0.3, "viscous and dry friction")],
)
def test_both_kinds_of_friction_are_found(ratio: float, friction: float, kind: str) -> None:
    """Damping ratio and friction angle within four standard uncertainties of what made the swings, and named."""
    steps = [swings(ratio, friction, first=first, seed=seed) for seed, first in enumerate((10.0, 8.0, 9.0))]
    found = fit_decay(steps, angle_unit="deg")
    assert found is not None
    assert found.kind == kind
    true = float(damping_from_half_cycle_peaks(1.0, ratio))
    assert abs(found.damping_ratio.value - true) < 4 * found.damping_ratio.standard_uncertainty
    assert abs(found.friction_angle.value - friction) < 4 * found.friction_angle.standard_uncertainty


def test_dry_friction_makes_a_straight_envelope() -> None:
    """It loses 2 f every half cycle whatever the swing, so the decrement grows as the swing shrinks."""
    one = swings(1.0, 0.5, u=1e-9)
    np.testing.assert_allclose(np.diff(np.abs(one.deviation)), -1.0, atol=1e-7)
    decrement, amplitude, _ = one.decrement_by_amplitude
    assert np.all(np.diff(decrement) > 0)
    np.testing.assert_allclose(decrement, 2 * np.log(amplitude / (amplitude - 1.0)), rtol=1e-6)


def test_too_few_swings_say_nothing() -> None:
    """A straight line needs three pairs, and of different sizes."""
    assert fit_decay([], angle_unit="deg") is None
    assert fit_decay([swings(0.3, 0.0, first=2.0)], angle_unit="deg") is None


def test_results_survive_their_json() -> None:
    """What was written is what is read."""
    one = swings(0.7, 0.1)
    np.testing.assert_array_equal(Extremes.from_json(one.as_json()).deviation, one.deviation)
    found = fit_decay([one], angle_unit="deg")
    assert found is not None
    assert Decay.from_json(found.as_json()) == found


def test_hysteresis_is_the_gap_between_up_and_down() -> None:
    """Levels of 12 deg/V reached 0.4 deg higher from below than from above; exact numbers come back exactly."""
    voltage, up = np.array([1.0, 0.0, -1.0, 0.0, 1.0, 0.0]), np.array([True, False, False, True, True, False])
    level = 3.0 + 12.0 * voltage + np.where(up, 0.2, -0.2)
    line = fit_static_line(voltage, level, np.full(6, 0.01), up, angle_unit="deg")
    assert line is not None
    assert line.hysteresis is not None
    assert line.gain.value == pytest.approx(12.0)
    assert line.hysteresis.value == pytest.approx(0.4)
    assert line.hysteresis.standard_uncertainty > 0


def test_one_sided_levels_have_no_hysteresis() -> None:
    """A staircase that only climbs cannot tell it from the gain."""
    voltage = np.array([0.0, 1.0, 2.0, 3.0])
    line = fit_static_line(voltage, 12 * voltage, np.full(4, 0.1), np.ones(4, dtype=bool), angle_unit="deg")
    assert line is not None
    assert line.hysteresis is None
    assert fit_static_line(voltage[:2], voltage[:2], np.ones(2), np.ones(2, dtype=bool), angle_unit="deg") is None


def test_a_viscous_rig_shows_neither_friction_nor_hysteresis(
    short_steps: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Within four standard uncertainties of nothing; the damping as it is; up and down alike."""
    found = evaluate_steps(recorded(short_steps, vane_model, noise=0.1, exposure=0.008, seed=3))
    assert found.decay is not None
    assert found.decay.kind == "viscous"
    damping = found.decay.damping_ratio
    assert damping.value == pytest.approx(0.12, abs=4 * damping.standard_uncertainty)
    assert found.static_line is not None
    assert found.static_line.hysteresis is not None
    assert abs(found.static_line.hysteresis.value) < 4 * found.static_line.hysteresis.standard_uncertainty
    for group in (*found.by_direction, *found.by_amplitude):
        for name in ("gain", "natural_frequency", "damping_ratio"):
            pooled = group.parameters[name]
            assert pooled is not None
            truth = getattr(vane_model, name)
            assert abs(pooled.value - truth) < 4.5 * pooled.standard_uncertainty
    assert [group.group for group in found.by_direction] == ["up", "down"]
    assert sum(group.n_steps for group in found.by_direction) == len(found.steps)


def test_single_steps_show_a_stiffer_rig_on_one_side(
    short_steps: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Two halves of a record from rigs of 3.00 and 3.03 Hz: the steps of each half show their own frequency."""
    stiffer = replace(vane_model, natural_frequency=3.03)
    one = recorded(short_steps, vane_model, noise=0.02, seed=4)
    other = recorded(short_steps, stiffer, noise=0.02, seed=5)
    half = one.angle.time > 10.0
    joined = replace(one, angle=replace(one.angle, angle=np.where(half, other.angle.angle, one.angle.angle)))
    found = evaluate_steps(joined)
    early = [s.parameters["natural_frequency"] for s in found.steps if s.time < 7.0]
    late = [s.parameters["natural_frequency"] for s in found.steps if s.time > 10.5]
    assert early
    assert late
    # to first order in a change of half a percent either way: 10 % of it is left for what is beyond
    for q in early:
        assert q is not None
        assert q.value == pytest.approx(3.00, abs=0.003 + 4 * q.standard_uncertainty)
    for q in late:
        assert q is not None
        assert q.value == pytest.approx(3.03, abs=0.003 + 4 * q.standard_uncertainty)
