"""The robust method: worked by hand, by simulation of its formulas, and on a rig that distorts in a known way."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from distorting_rig import VANE, distorted_run, multisine, odd_orders, straight
from numpy.typing import NDArray

from freqid.estimate.combination import combine
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.identification import Identification, identify
from freqid.estimate.realisations import mean_response, robust_mean, same_voltage
from freqid.estimate.record import Record
from freqid.held_response import HeldResponse
from freqid.records import Run
from freqid.second_order import SecondOrder

Floats = NDArray[np.float64]
Curve = Callable[[Floats], Floats]


def test_two_runs_of_two_periods_by_hand() -> None:
    """G = [1 + 0.1j, 1.2 - 0.1j], [0.8, 0.8 + 0.2j]: means 1.1 and 0.8 + 0.1j, noise variances of the means 0.02 and
    0.01; so G = 0.95 + 0.05j, noise 0.0075, total 0.025, distortion of one run 2 (0.025 - 0.0075) = 0.035.
    """
    periods = np.array([[1 + 0.1j, 1.2 - 0.1j], [0.8, 0.8 + 0.2j]])
    means = periods.mean(axis=1)
    noise = np.sum(np.abs(periods - means[:, None]) ** 2, axis=1) / (2 * 1)
    np.testing.assert_allclose(noise, [0.02, 0.01])
    found = robust_mean(means[:, None], noise[:, None])
    assert found.response[0] == pytest.approx(0.95 + 0.05j)
    assert found.noise[0] == pytest.approx(0.0075)
    assert found.total[0] == pytest.approx(0.025)
    assert found.nonlinear[0] == pytest.approx(0.035)


def test_variances_of_five_periods_and_seven_runs() -> None:
    """Noise of variance 1 a period, distortion of variance 0.25 a run, over 4000 lines: noise of the mean 1/35, total
    1/35 + 0.25/7 = 0.064286, distortion 0.25, and the true error of the mean as large as the total says.

    A complex variance from v complex degrees has a relative deviation of 1 / sqrt(v): five deviations of the mean over
    4000 lines with v = 28 and v = 6, and 1 for the squared error itself.
    """
    rng = np.random.default_rng(6)

    def complex_noise(*shape: int) -> NDArray[np.complex128]:
        return (rng.standard_normal(shape) + 1j * rng.standard_normal(shape)) / np.sqrt(2)

    lines, runs, periods = 4000, 7, 5
    every = 1.0 + 0.5 * complex_noise(runs, 1, lines) + complex_noise(runs, periods, lines)
    means = every.mean(axis=1)
    noise = np.sum(np.abs(every - means[:, None]) ** 2, axis=1) / (periods * (periods - 1))
    found = robust_mean(means, noise)
    many = np.sqrt(lines)
    assert np.mean(found.noise) == pytest.approx(1 / 35, rel=5 / np.sqrt(28) / many)
    assert np.mean(found.total) == pytest.approx(0.064286, rel=5 / np.sqrt(6) / many)
    assert np.mean(found.nonlinear) == pytest.approx(0.25, rel=5 * 1.8 / np.sqrt(6) / many)
    assert np.mean(np.abs(found.response - 1) ** 2) == pytest.approx(0.064286, rel=5 / many)
    relative = np.std(found.total) / np.mean(found.total)
    assert relative == pytest.approx(1 / np.sqrt(6), rel=0.1)


@pytest.mark.parametrize(("lines", "expected"), [(5, 2.7), (20, 2.925)])
def test_the_best_linear_response_of_a_cube_holds_the_closed_form(lines: int, expected: float) -> None:
    """u^3 of a random-phase multisine of F equal lines and rms s has the linear gain 3 s^2 (1 - 1 / (2 F)).

    F = 5, s = 1: 2.7; F = 20: 2.925 (Gaussian limit 3, Bussgang). The mean of 300 noiseless realisations lies within
    five of the uncertainties that their scatter gives it, averaged over the lines.
    """
    rng, instants, orders = np.random.default_rng(7), np.arange(256), 2 * np.arange(lines) + 1
    responses = []
    for _ in range(300):
        phase = rng.uniform(0, 2 * np.pi, lines)
        u = np.sqrt(2 / lines) * np.cos(2 * np.pi * np.outer(instants, orders) / 256 + phase).sum(axis=1)
        responses.append(np.fft.fft(u**3)[orders] / np.fft.fft(u)[orders])
    found = robust_mean(np.array(responses), np.zeros((300, lines)))
    assert np.mean(found.response) == pytest.approx(expected, abs=5 * np.sqrt(np.mean(found.total) / lines))
    np.testing.assert_allclose(found.nonlinear, 300 * found.total)


# ---- runs of a rig that distorts ----


def slightly_cubic(value: Floats) -> Floats:
    """Third-order distortion of the voltage: 2 % at 1 V."""
    return value + 0.02 * value**3


def runs(count: int, before: Curve, *, phases: bool) -> list[Identification]:
    """Runs with new phases each, or all with the same voltage; new noise each."""
    orders = odd_orders(31, 1)
    return [
        identify(distorted_run(multisine(orders, number if phases else 1), 100 + number, before=before))
        for number in range(count)
    ]


@pytest.fixture(scope="module")
def realisations() -> list[Identification]:
    """Six realisations of the cubic rig."""
    return runs(6, slightly_cubic, phases=True)


def test_realisations_show_the_distortion_that_their_periods_do_not(realisations: list[Identification]) -> None:
    """Gain 12 (1 + 0.02 * 2.9) for 12 lines or so, the rig's own frequency and damping, all within their intervals;
    the scatter over the phases stands far above the noise and is told.
    """
    together = combine(realisations)
    lines = len(together.response.frequency)
    expected = {"gain": 12 * (1 + 0.06 * (1 - 1 / (2 * lines))), "natural_frequency": 3.0, "damping_ratio": 0.12}
    for name, value in expected.items():
        quantity = together.model.parameters[name]
        assert quantity is not None
        assert quantity.interval_95[0] < value < quantity.interval_95[1]
    stochastic = together.model.distortion[-1]
    assert stochastic.kind == "stochastic" and stochastic.significant and stochastic.excess.interval_95[0] > 5
    assert "distortion_stochastic" in [caveat.code for caveat in together.model.caveats]
    assert together.model.runs == tuple(f"seed {100 + number}" for number in range(6))
    assert together.model.amplitude is not None
    assert together.model.amplitude.rms_voltage == pytest.approx(1.0)


def test_the_total_variance_is_the_error_of_the_mean(realisations: list[Identification]) -> None:
    """Against the closed form of the best linear response, |error|^2 over the total variance averages to v / (v - 2)
    with the 20 or more degrees v of the variance; over 12 lines within five of 1.1 / sqrt(12).
    """
    together = combine(realisations).response
    lines = len(together.frequency)
    truth = replace(VANE, gain=12 * (1 + 0.06 * (1 - 1 / (2 * lines))))
    ratio = np.abs(together.response - truth.response(together.frequency)) ** 2 / together.variance
    assert np.all(together.variance > 2 * together.noise_variance)
    assert np.mean(ratio) == pytest.approx(1.1, abs=5 * 1.1 / np.sqrt(lines))


def test_repeats_of_one_voltage_do_not_hide_the_distortion() -> None:
    """Three runs with the same phases: the noise averages out, what the detection lines show of the distortion stays in
    the variance, and no stochastic distortion is claimed.
    """
    found = runs(3, slightly_cubic, phases=False)
    together = combine(found)
    assert same_voltage(found[0].response, found[1].response)
    single = found[-1].response
    np.testing.assert_allclose(together.response.noise_variance, single.noise_variance / 3, rtol=0.5)
    assert np.median(together.response.variance / single.variance) > 0.8
    assert all(one.kind != "stochastic" for one in together.model.distortion)


def test_realisations_of_a_straight_rig_show_nothing() -> None:
    """Three realisations, noise only: no stochastic distortion at 1 in 200 (p above 1e-4 with any seed but a freak)."""
    together = combine(runs(3, straight, phases=True))
    stochastic = together.model.distortion[-1]
    assert stochastic.kind == "stochastic"
    assert stochastic.p_value > 1e-4
    assert "runs_differ" not in [caveat.code for caveat in together.model.caveats]


def lines_of(drive_phase: Floats, amplitude: Floats | None = None) -> FrequencyResponse:
    """A response with nothing but its lines."""
    count = len(drive_phase)
    ones = np.ones(count)
    return FrequencyResponse(
        frequency=np.arange(1, count + 1) * 0.5,
        response=ones + 0j,
        variance=ones,
        coherence=ones,
        noise=ones,
        input_amplitude=ones if amplitude is None else amplitude,
        degrees_of_freedom=100 * ones,
        input_phase=drive_phase,
        angle_unit="deg",
        method="periodic",
    )


def test_the_same_voltage_is_known_whatever_its_size_and_start() -> None:
    """Twice as large and 0.37 s later is the same voltage; new phases are another (correlation below 0.95)."""
    phase = np.random.default_rng(8).uniform(0, 2 * np.pi, 12)
    first = lines_of(phase)
    later = lines_of(phase - 2 * np.pi * first.frequency * 0.37, np.full(12, 2.0))
    other = lines_of(np.random.default_rng(9).uniform(0, 2 * np.pi, 12))
    assert same_voltage(first, first)
    assert same_voltage(first, later)
    assert not same_voltage(first, other)
    assert not same_voltage(first, lines_of(phase[:6]))


def test_own_clocks_are_brought_together_before_averaging() -> None:
    """Two runs with lags of 0.1 and 0.3 s: each is turned to the lag of the last before the mean, which is exact."""
    frequency = np.arange(1, 13) * 0.5
    models = [SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=lag) for lag in (0.1, 0.3)]
    found = [
        replace(lines_of(np.random.default_rng(seed).uniform(0, 6, 12)), response=model.response(frequency))
        for seed, model in enumerate(models)
    ]
    mean = mean_response(found, models, common_clock=False)
    assert mean.realisations == 2
    np.testing.assert_allclose(mean.response.response, models[1].response(frequency), rtol=1e-12)


def test_a_misfit_that_every_run_shares_does_not_average_out() -> None:
    """A second mode at 6 Hz in every run: three runs with new phases leave the natural frequency as uncertain as the
    misfit makes it: more than half the variance of one run stays. Of three straight runs a third stays, but for the
    harmonic instead of the plain mean of three covariances that differ by up to a third: 25 %.
    """

    def seen_twice(run: Run) -> Run:
        """The same run with a second mode in the angle."""
        record = Record.from_run(run)
        beside = HeldResponse(record.drive, 6.0, 0.1).mean(run.angle.time - VANE.delay, 0.0)
        return replace(run, angle=replace(run.angle, angle=run.angle.angle + beside))

    orders = odd_orders(31, 1)
    plain = [distorted_run(multisine(orders, number), number) for number in range(3)]
    found = [identify(seen_twice(run)) for run in plain]
    together = combine(found).model
    assert not together.adequacy.adequate
    assert "model_inadequate" in [caveat.code for caveat in together.caveats]
    single = np.mean([np.diag(one.model.covariance)[:3] for one in found], axis=0)
    assert np.all(np.diag(together.covariance)[:3] > single / 2)
    straight_runs = [identify(run) for run in plain]
    own = np.mean([np.diag(one.model.covariance)[:3] for one in straight_runs], axis=0)
    np.testing.assert_allclose(np.diag(combine(straight_runs).model.covariance)[:3], own / 3, rtol=0.25)
