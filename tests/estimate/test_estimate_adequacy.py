"""The lack-of-fit test: its statistic by hand, its false alarms by simulation, and what it must notice."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import binom, chi2, kstest

from freqid.estimate.adequacy import lack_of_fit, whitened_misfit
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.second_order import SecondOrder

LINES = np.linspace(0.5, 8.0, 20)


def measured(model: SecondOrder, *, deviation: float, rng: np.random.Generator) -> FrequencyResponse:
    """Response at 20 lines with complex noise of known variance, larger at high gain."""
    truth = model.response(LINES)
    variance = deviation**2 * (1 + np.abs(truth)) ** 2
    noise = np.sqrt(variance / 2) * (rng.normal(size=20) + 1j * rng.normal(size=20))
    return FrequencyResponse(
        frequency=LINES,
        response=truth + noise,
        variance=variance,
        coherence=np.ones(20),
        noise=np.ones(20),
        input_amplitude=np.ones(20),
        degrees_of_freedom=np.full(20, 1e6),
        angle_unit="deg",
        method="periodic",
    )


def test_misfit_is_in_standard_uncertainties(vane_model: SecondOrder) -> None:
    """One standard uncertainty off in the real part is one."""
    exact = measured(vane_model, deviation=0.0, rng=np.random.default_rng(1))
    shifted = replace(exact, response=exact.response + 0.3, variance=np.full(20, 2 * 0.3**2))
    np.testing.assert_allclose(whitened_misfit(shifted, vane_model), 1.0, atol=1e-12)


def test_statistic_is_the_projected_sum_of_squares(vane_model: SecondOrder) -> None:
    """By normal equations, written out: the residual of the whitened misfit after the four sensitivities.

    Variances with a million degrees of freedom are as good as known: two parts in a million.
    """
    seen = measured(vane_model, deviation=0.02, rng=np.random.default_rng(2))
    weight = np.sqrt(2 / seen.variance)
    error = (seen.response - vane_model.response(LINES)) * weight
    y = np.concatenate([error.real, error.imag])
    slope = vane_model.sensitivity(LINES) * weight[:, None]
    a = np.concatenate([slope.real, slope.imag])
    expected = y @ y - y @ a @ np.linalg.solve(a.T @ a, a.T @ y)
    found = lack_of_fit(seen, vane_model, noise_freedom=1e9)
    assert found.degrees_of_freedom == 36
    assert found.statistic == pytest.approx(expected, rel=3e-6)
    # Fisher's F with 1e9 degrees of freedom below is chi-square
    assert found.p_value == pytest.approx(chi2.sf(expected, 36), rel=1e-4)


def test_a_nearby_model_is_judged_as_the_best_one(vane_model: SecondOrder) -> None:
    """Small errors of the parameters are projected out: what counts is whether some second-order model fits.

    A shift of one part in 1e5 leaves second-order terms only, (1e-5 Q)^2 of the gain over its uncertainty of 2 %,
    nothing.
    """
    seen = measured(vane_model, deviation=0.02, rng=np.random.default_rng(3))
    near = SecondOrder.from_vector(vane_model.vector * (1 + 1e-5))
    assert lack_of_fit(seen, near, noise_freedom=1e9).statistic == pytest.approx(
        lack_of_fit(seen, vane_model, noise_freedom=1e9).statistic, rel=1e-4
    )


def test_false_alarms_are_five_percent(vane_model: SecondOrder) -> None:
    """400 seeds: p-values are uniform (Kolmogorov-Smirnov at 1e-4) and 5 % of them below 0.05 (binomial at 1e-4 on
    either side).
    """
    p_values = [
        lack_of_fit(
            measured(vane_model, deviation=0.02, rng=np.random.default_rng(seed)), vane_model, noise_freedom=1e9
        ).p_value
        for seed in range(400)
    ]
    assert kstest(p_values, "uniform").pvalue > 1e-4
    low, high = binom.ppf([1e-4, 1 - 1e-4], 400, 0.05)
    assert low <= np.sum(np.array(p_values) < 0.05) <= high


def test_estimated_variances_are_allowed_for(vane_model: SecondOrder) -> None:
    """Variances all wrong by one common factor of chi-square with 10 degrees of freedom: Fisher's F keeps the alarms
    at 5 %.
    """
    alarms = 0
    for seed in range(400):
        rng = np.random.default_rng(seed)
        seen = measured(vane_model, deviation=0.02, rng=rng)
        estimated = replace(seen, variance=seen.variance * rng.chisquare(10) / 10)
        alarms += not lack_of_fit(estimated, vane_model, noise_freedom=10.0).adequate
    low, high = binom.ppf([1e-4, 1 - 1e-4], 400, 0.05)
    assert low <= alarms <= high


def test_a_second_resonance_is_noticed(vane_model: SecondOrder) -> None:
    """A mode of 2 % of the gain at 6 Hz, ten times its noise at its peak, is no second-order rig."""
    seen = measured(vane_model, deviation=0.002, rng=np.random.default_rng(4))
    mode = SecondOrder(gain=0.24, natural_frequency=6.0, damping_ratio=0.05)
    found = lack_of_fit(replace(seen, response=seen.response + mode.response(LINES)), vane_model, noise_freedom=1e6)
    assert found.p_value < 1e-6
    assert not found.adequate


def test_only_the_points_to_be_used_count(vane_model: SecondOrder) -> None:
    """A wild point that is not independent does not take part."""
    seen = measured(vane_model, deviation=0.02, rng=np.random.default_rng(5))
    use = np.arange(20) != 7
    wild = replace(seen, response=np.where(use, seen.response, 1e3))
    found, plain = (lack_of_fit(r, vane_model, noise_freedom=1e6, use=use) for r in (wild, seen))
    assert found == plain
    assert found.degrees_of_freedom == 34


@pytest.mark.parametrize("points", [0, 1, 2])
def test_too_few_points_say_nothing(points: int, vane_model: SecondOrder) -> None:
    """Two complex points are four numbers for four parameters: no degree of freedom is left, and no verdict."""
    seen = measured(vane_model, deviation=0.02, rng=np.random.default_rng(6))
    found = lack_of_fit(seen, vane_model, noise_freedom=1e6, use=np.arange(20) < points)
    assert np.isnan(found.p_value)
    assert found.degrees_of_freedom == 2 * points - 4
