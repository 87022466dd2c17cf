"""Distortion levels against closed forms, brute force, their own uncertainty, and what noise alone would show."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from distorting_rig import (
    PERIOD,
    RATE,
    TWO_CLOCKS,
    VANE,
    Curve,
    distorted_run,
    multisine,
    odd_orders,
    straight,
    true_amplitudes,
)
from numpy.typing import NDArray

from freqid.estimate.distortion import EVEN, ODD, UNDIVIDED, DistortionLevels, distortion_levels
from freqid.estimate.distortion_summary import DistortionSummary, distortion_caveats, summarize_distortion
from freqid.estimate.motion import estimate_motion
from freqid.estimate.periodic import LineRegression, periodic_response
from freqid.estimate.prediction import MotionParameters
from freqid.estimate.record import Record
from freqid.estimate.record_fit import refine
from freqid.records import Run
from freqid.second_order import SecondOrder

Floats = NDArray[np.float64]


def levels_of(run: Run) -> DistortionLevels | None:
    """Levels around a fit that starts near by; the clocks are one."""
    record = Record.from_run(run)
    fit = refine(record, MotionParameters(model=VANE), evaluations=8)
    assert fit is not None
    lines = LineRegression.of(record, fit)
    measured, _ = periodic_response(record, fit, lines)
    return distortion_levels(record, fit, lines, measured)


def known(run: Run) -> DistortionLevels:
    """The same where there are detection lines."""
    found = levels_of(run)
    assert found is not None
    return found


def both_terms(value: Floats) -> Floats:
    """2 % of second and third order at 1 V (or 1 deg)."""
    return value + 0.02 * value**2 + 0.02 * value**3


def slightly_square(value: Floats) -> Floats:
    """A sensor that reads 1 % too much at 10 deg and 1 % too little at -10 deg."""
    return value + 1e-3 * value**2


# ---- closed forms ----


def test_two_lines_through_second_and_third_order_hold_the_closed_form() -> None:
    """Two equal lines of amplitude a, orders 1 and 9, before the rig.

    Second order: c a^2 / 2 at order 2, c a^2 at order 8; third: c a^3 / 4 at order 3, 3 c a^3 / 4 at order 7 (products
    of cosines). Each is held by the converter and passes the rig. The steady part begins a period late, when the
    products' own start-up has died to exp(-2.26 * 5) = 1e-5 of the largest.
    """
    orders, size = np.array([1, 9]), 0.8
    drive = multisine(orders, 3, rms=size)  # two lines: a = rms
    late = replace(drive, periodicity=replace(drive.periodicity, start=6.0))
    found = known(distorted_run(late, 1, before=both_terms, noise=1e-6))
    assert list(np.round(found.frequency * PERIOD)) == [2, 3, 4, 5, 6, 7, 8]
    assert list(found.parity) == [EVEN, ODD, EVEN, ODD, EVEN, ODD, EVEN]
    product = np.array([size**2 / 2, size**3 / 4, 0, 0, 0, 3 * size**3 / 4, size**2]) * 0.02
    f = found.frequency
    expected = product * np.abs(VANE.response(f)) * np.sinc(f / RATE)
    np.testing.assert_allclose(found.level, expected, atol=2e-5 * expected.max())


@pytest.mark.parametrize(
    ("before", "behind"), [(straight, straight), (both_terms, straight), (straight, slightly_square)]
)
def test_levels_are_those_of_a_steady_period_in_spite_of_two_clocks(before: Curve, behind: Curve) -> None:
    """Brute force: 240 noiseless instants of one period, transformed. The log is on another clock, jitters by 1 ms,
    averages over 8 ms and has lost 2 % of its frames; no line is off by more than five of its uncertainties.
    """
    drive = multisine(odd_orders(31, 1), 1)
    record = Record.from_run(distorted_run(drive, 1, before=before, behind=behind, **TWO_CLOCKS))
    motion = estimate_motion(record)
    assert motion.lines is not None
    fit = motion.weighted.fit
    measured, _ = periodic_response(motion.record, fit, motion.lines)
    found = distortion_levels(motion.record, fit, motion.lines, measured)
    assert found is not None
    orders = np.round(found.frequency * PERIOD).astype(int)
    truth = true_amplitudes(drive, before=before, behind=behind, exposure=0.008)[orders]
    assert np.all(np.abs(found.power - truth**2) < 5 * found.power_uncertainty)
    assert np.all(found.level[truth > 10 * found.noise] > 0.8 * truth[truth > 10 * found.noise])


def test_parity_tells_even_from_odd() -> None:
    """A square behind the rig shows on even lines only: its odd lines hold noise, its even ones stand far above."""
    drive = multisine(odd_orders(31, 2), 2)
    found = known(distorted_run(drive, 2, behind=slightly_square))
    summaries = summarize_distortion(found, 3.0, angle_unit="deg")
    odd, even = summaries
    assert (odd.kind, even.kind) == ("odd", "even")
    assert even.significant and even.excess.interval_95[0] > 5
    assert odd.p_value > 1e-4
    assert [caveat.code for caveat in distortion_caveats(summaries) if "even" in caveat.code] == ["distortion_even"]


# ---- what the uncertainty claims ----

SEEDS = 40


@pytest.mark.parametrize(("before", "expected"), [(straight, 0.398), (both_terms, 1.0)])
def test_power_is_right_on_average_and_its_uncertainty_is_its_scatter(before: Curve, expected: float) -> None:
    """Over 40 seeds: (power - truth) over its uncertainty has mean 0, and at strong lines mean square 1.

    Where there is nothing but noise, x = |A|^2 / s^2 is exponential and the uncertainty grows with the power found:
    the mean square is the integral of (x - 1)^2 / (1 + 2 max(x - 1, 0)) exp(-x), 1 - 2/e + (1/4 + 0.4615 / 4) / e =
    0.398. Over 15 or more lines and 40 seeds the mean is within five of 1 / sqrt(600), 0.2 (and 0.03 for the bias that
    an uncertainty following the power brings); the mean square within five of at most sqrt(2 / 600), 0.29.
    """
    drive = multisine(odd_orders(31, 3), 3)
    truth = None
    scores = []
    for seed in range(SEEDS):
        found = known(distorted_run(drive, seed, before=before))
        if truth is None:
            orders = np.round(found.frequency * PERIOD).astype(int)
            truth = true_amplitudes(drive, before=before)[orders]
        scores.append((found.power - truth**2) / found.power_uncertainty)
    score = np.array(scores)
    assert score.shape[1] > 15
    assert abs(np.mean(score)) < 0.2 + 0.03
    assert np.mean(score**2) == pytest.approx(expected, abs=0.29)


def test_noise_alone_is_called_distortion_as_rarely_as_claimed() -> None:
    """Over 40 records of a straight rig the p-values of both kinds are uniform: mean 1/2 within five of
    1 / sqrt(12 * 80) = 0.16 (the two kinds share their noise estimate, but not their lines).
    """
    drive = multisine(odd_orders(31, 4), 4)
    chance = [
        one.p_value
        for seed in range(SEEDS)
        for one in summarize_distortion(known(distorted_run(drive, seed)), 3.0, angle_unit="deg")
    ]
    assert len(chance) == 2 * SEEDS
    assert np.mean(chance) == pytest.approx(0.5, abs=0.16)


# ---- invariances and limits ----


def test_relative_level_does_not_depend_on_the_angle_unit() -> None:
    """Degrees or radians: the same relative level, the same excess over the noise."""
    run = distorted_run(multisine(odd_orders(31, 5), 5), 5, before=both_terms)
    scaled = replace(run, angle=replace(run.angle, angle=np.radians(run.angle.angle), angle_unit="rad"))
    one, other = known(run), None
    record = Record.from_run(scaled)
    fit = refine(record, MotionParameters(model=replace(VANE, gain=np.radians(12.0))), evaluations=8)
    assert fit is not None
    lines = LineRegression.of(record, fit)
    other = distortion_levels(record, fit, lines, periodic_response(record, fit, lines)[0])
    assert other is not None
    np.testing.assert_allclose(other.relative, one.relative, rtol=1e-4, atol=1e-7)


def test_every_harmonic_excited_leaves_no_detection_line() -> None:
    """Then nothing is known, and nothing is said."""
    assert levels_of(distorted_run(multisine(np.arange(1, 32), 6), 6)) is None
    assert summarize_distortion(None, 3.0, angle_unit="deg") == ()


def test_even_lines_excited_too_leave_the_parity_open() -> None:
    """With orders 1, 2, 4, 7 the products fall on all orders: one undivided level each, one summary."""
    found = known(distorted_run(multisine(np.array([1, 2, 4, 7, 12, 15]), 7), 7))
    assert set(found.parity) == {UNDIVIDED}
    assert [one.kind for one in summarize_distortion(found, 3.0, angle_unit="deg")] == ["all"]


def test_a_single_period_cannot_tell_distortion_from_noise() -> None:
    """The lines without voltage are then all that shows the noise."""
    drive = multisine(odd_orders(31, 8), 8, periods=1)
    assert levels_of(distorted_run(drive, 8, before=both_terms)) is None


def test_an_excited_line_that_folds_onto_a_detection_line_spoils_it_not() -> None:
    """At 12 frames/s (48 orders a period) the line of order 31 comes back at 17, order 29 at 19: both are left out."""
    orders = np.array([1, 3, 5, 9, 29, 31])
    found = known(distorted_run(multisine(orders, 9), 9, sample_rate=12.0))
    left = set(np.round(found.frequency * PERIOD).astype(int))
    assert {17, 19}.isdisjoint(left) and {2, 7, 11, 16, 18} <= left


def test_a_summary_survives_its_json() -> None:
    """What results/model.json holds comes back as it was."""
    found = known(distorted_run(multisine(odd_orders(31, 5), 5), 5, before=both_terms))
    for one in summarize_distortion(found, 3.0, angle_unit="deg"):
        assert DistortionSummary.from_json(one.as_json()) == one


def test_levels_between_the_detection_lines_join_their_powers() -> None:
    """At a detection line its own level, half way between two the root of their mean power; NaN without lines."""
    found = known(distorted_run(multisine(odd_orders(31, 5), 5), 5, before=both_terms))
    even = found.of(EVEN)
    middle = (even.frequency[3] + even.frequency[4]) / 2
    expected = [even.level[3], np.sqrt((even.level[3] ** 2 + even.level[4] ** 2) / 2)]
    np.testing.assert_allclose(found.at(np.array([even.frequency[3], middle]), EVEN), expected)
    assert np.all(np.isnan(even.at(np.array([1.0]), ODD)))


def test_the_reference_is_the_linear_answer() -> None:
    """Between equal lines the rig would answer with its gain times their amplitude, held. With noise of 1e-3 deg the
    fitted model is right to 1e-4; the hold weakens the voltage by less than (pi 8 / 500)^2 / 6 from line to line.
    """
    drive = multisine(odd_orders(31, 5), 5)
    found = known(distorted_run(drive, 5, noise=1e-3))
    count = len(odd_orders(31, 5))
    amplitude = np.sqrt(2 / count)  # rms 1 V
    rig = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12)
    expected = amplitude * np.abs(rig.response(found.frequency)) * np.sinc(found.frequency / RATE)
    np.testing.assert_allclose(found.linear, expected, rtol=6e-4)
