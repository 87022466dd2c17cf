"""The whole estimate: what it claims about its uncertainty over many seeds, what it tells the user, and what it
refuses.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import pytest
from scipy.stats import binom, kstest

from freqid.errors import EstimationError
from freqid.estimate.combination import combine
from freqid.estimate.identification import Identification, identify
from freqid.records import InputStream, Run
from freqid.second_order import PARAMETER_ORDER, SecondOrder

Recorder = Callable[..., Run]
SEEDS = 40
CHANCE = 1e-4
SENSOR = {
    "common_clock": False,
    "clock_ratio": 1.00015,
    "clock_offset": -0.35,
    "exposure": 0.008,
    "jitter": 0.001,
    "lost_frames": 0.02,
    "noise": 0.3,
}


@dataclass(frozen=True, slots=True)
class Campaign:
    """Forty estimates of one rig on two clocks."""

    found: list[Identification]
    truth: np.ndarray


@pytest.fixture(scope="module")
def campaign(short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder) -> Campaign:
    """One estimate a seed; the delay contains the offset."""
    found = [identify(recorded(short_multisine, vane_model, seed=seed, **SENSOR)) for seed in range(SEEDS)]
    return Campaign(found, vane_model.vector + np.array([0, 0, 0, 0.35]))


def test_intervals_hold_the_truth(campaign: Campaign) -> None:
    """Of 160 intervals of 95 % at least as many hold the truth as chance allows at 1e-4; so for each parameter by
    itself.
    """
    held = np.zeros((SEEDS, 4), dtype=bool)
    for i, one in enumerate(campaign.found):
        for k, name in enumerate(PARAMETER_ORDER):
            q = one.model.parameters[name]
            assert q is not None
            held[i, k] = q.interval_95[0] <= campaign.truth[k] <= q.interval_95[1]
    assert held.sum() >= binom.ppf(CHANCE, 4 * SEEDS, 0.95)
    assert np.all(held.sum(axis=0) >= binom.ppf(CHANCE, SEEDS, 0.95))


def test_estimates_are_unbiased_and_scatter_as_stated(campaign: Campaign) -> None:
    """Errors in stated uncertainties: mean zero within five of 1 / sqrt(40), variance one within five of sqrt(2 / 39)
    either way.

    Stated uncertainties come from some 40 or more degrees of freedom: their own scatter adds to the variance no more
    than 5 %.
    """
    stated = np.array([np.sqrt(np.diag(one.model.covariance)) for one in campaign.found])
    error = np.array([one.model.model.vector for one in campaign.found]) - campaign.truth
    normalised = error / stated
    assert np.all(np.abs(normalised.mean(axis=0)) < 5 / np.sqrt(SEEDS))
    assert np.all(np.abs(np.log(normalised.var(axis=0, ddof=1))) < 5 * np.sqrt(2 / (SEEDS - 1)) + 0.05)


def test_correlations_are_the_stated_ones(campaign: Campaign) -> None:
    """Whitened by the stated covariance the errors are independent: a correlation of 40 has s.d. 1 / sqrt(39); five
    of it.
    """
    whitened = []
    for one in campaign.found:
        scale = np.sqrt(np.diag(one.model.covariance))
        root = np.linalg.cholesky(one.model.covariance / np.outer(scale, scale))
        whitened.append(np.linalg.solve(root, (one.model.model.vector - campaign.truth) / scale))
    correlation = np.corrcoef(np.transpose(whitened))
    assert np.max(np.abs(correlation - np.eye(4))) < 5 / np.sqrt(SEEDS - 1)


def test_false_alarms_of_the_adequacy_test(campaign: Campaign) -> None:
    """A true second-order rig is called inadequate in 5 % of the runs, no more than chance at 1e-4; p-values are
    spread evenly.
    """
    p_values = np.array([one.model.adequacy.p_value for one in campaign.found])
    assert np.sum(p_values < 0.05) <= binom.ppf(1 - CHANCE, SEEDS, 0.05)
    assert kstest(p_values, "uniform").pvalue > CHANCE


def test_clock_map_holds_the_truth(campaign: Campaign) -> None:
    """Ratio of +150 ppm in its 95 % interval as often as chance allows; lost frames, interval and jitter as they
    were.
    """
    held = sum(
        one.model.clock.ratio_ppm.interval_95[0] <= 150.0 <= one.model.clock.ratio_ppm.interval_95[1]
        for one in campaign.found
    )
    assert held >= binom.ppf(CHANCE, SEEDS, 0.95)
    for one in campaign.found:
        clock = one.model.clock
        assert not clock.offset_known
        assert clock.jitter == pytest.approx(0.001, rel=5 / np.sqrt(2 * clock.frames))
        assert clock.frame_interval == pytest.approx(1 / 60, rel=1e-4)
    # about 1050 frames a run; the first and the last frame of a run, when lost, leave no gap
    lost = sum(one.model.clock.lost_frames for one in campaign.found)
    total = sum(one.model.clock.frames for one in campaign.found) + lost
    assert abs(lost - 0.02 * total) < 5 * np.sqrt(0.02 * total) + 2 * SEEDS * 0.02


def test_measured_response_scatters_as_stated(campaign: Campaign, vane_model: SecondOrder) -> None:
    """Error squared over stated variance is f / (f - 2) on average: 600 values, and one noise level a run known to 2
    / f.
    """
    ratio = []
    for one in campaign.found:
        f = one.response.frequency
        truth = vane_model.response(f) * np.exp(-2j * np.pi * f * 0.35)
        ratio.append(np.abs(one.response.response - truth) ** 2 / one.response.variance)
    freedom = float(one.response.degrees_of_freedom.min())
    # ratio and offset of the clocks are fitted: the phase at every line moves with the lag, which the variance of a
    # line alone
    # does not contain: two of thirty numbers a run, at most 2 / 30 of the mean in excess
    spread = 5 * np.sqrt(1 / np.size(ratio) + 2 / (SEEDS * freedom))
    assert np.mean(ratio) == pytest.approx(freedom / (freedom - 2), abs=spread + 2 / 30)


def test_two_clocks_are_told(campaign: Campaign) -> None:
    """The delay contains the offset, every time, and nothing else is wrong with a good record."""
    for one in campaign.found:
        codes = {c.code for c in one.model.caveats}
        assert "delay_includes_clock_offset" in codes
        assert codes <= {"delay_includes_clock_offset", "model_inadequate"}


# ---- several runs ----


def test_runs_combined_are_the_generalised_mean(campaign: Campaign) -> None:
    """Gain, natural frequency and damping ratio by the weights of their inverse covariances, written out; the delay
    is the last's.
    """
    some = campaign.found[:5]
    weights = [np.linalg.inv(one.model.covariance[:3, :3]) for one in some]
    covariance = np.linalg.inv(sum(weights))
    mean = covariance @ sum(w @ one.model.model.vector[:3] for w, one in zip(weights, some, strict=True))
    found = combine(some).model
    np.testing.assert_allclose(found.model.vector[:3], mean, rtol=1e-9)
    assert found.model.delay == some[-1].model.model.delay
    assert found.runs == tuple(f"seed {seed}" for seed in range(5))
    if "runs_differ" not in [c.code for c in found.caveats]:
        np.testing.assert_allclose(found.covariance[:3, :3], covariance, rtol=1e-9)


def test_runs_that_differ_widen_the_interval(campaign: Campaign) -> None:
    """A run moved by twenty uncertainties: the covariance grows by the Birge ratio, and the user is told."""
    first, second = campaign.found[:2]
    moved = second.model.model.vector.copy()
    moved[1] += 20 * np.sqrt(second.model.covariance[1, 1])
    other = replace(second, model=replace(second.model, model=SecondOrder.from_vector(moved)))
    together, apart = combine([first, second]).model, combine([first, other]).model
    assert "runs_differ" in [c.code for c in apart.caveats]
    assert apart.covariance[1, 1] > 20 * together.covariance[1, 1]


def test_runs_in_different_units_and_no_runs_are_refused(campaign: Campaign) -> None:
    """Degrees and radians have no mean; nothing has none either."""
    first, second = campaign.found[:2]
    with pytest.raises(EstimationError, match="different angle units: import them with the same rig sheet"):
        combine([first, replace(second, model=replace(second.model, angle_unit="rad"))])
    with pytest.raises(EstimationError, match="no complete run to combine"):
        combine([])
