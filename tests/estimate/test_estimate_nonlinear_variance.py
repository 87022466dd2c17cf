"""What distortion does to one run: its variance carried to the lines and into the parameters, and only where it is."""

from __future__ import annotations

import numpy as np
import pytest
from distorting_rig import PERIOD, VANE, distorted_run, multisine, odd_orders, straight, true_amplitudes
from numpy.typing import NDArray

from freqid.estimate.distortion import EVEN, ODD, DistortionLevels
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.measured_response import MeasuredResponse, joint_freedom, measure_response
from freqid.estimate.motion import estimate_motion
from freqid.estimate.nonlinear_variance import NonlinearVariance, nonlinear_variance
from freqid.estimate.record import Record

Floats = NDArray[np.float64]


def slightly_cubic(value: Floats) -> Floats:
    """Third-order distortion of the voltage: 2 % at 1 V."""
    return value + 0.02 * value**3


def slightly_square(value: Floats) -> Floats:
    """Second-order distortion of the voltage: 2 % at 1 V."""
    return value + 0.02 * value**2


def measure(seed: int, before: object = straight) -> MeasuredResponse:
    """The response of one realisation of 24 lines."""
    orders = odd_orders(61, seed)
    drive = multisine(orders, seed)
    run = distorted_run(drive, seed, before=before, noise=0.1)  # type: ignore[arg-type]
    return measure_response(estimate_motion(Record.from_run(run)))


def test_one_run_of_a_cubic_rig_holds_the_best_linear_response() -> None:
    """Six realisations: the error against the closed form 12 (1 + 0.06 (1 - 1 / 48)) and the rig's own 3 Hz and 0.12,
    over its uncertainty. With some five degrees of freedom its square is 5/3 on average; over 18 correlated scores it
    stays below four times that. Noise alone would claim a fiftieth of the variance or less.
    """
    truth = np.array([12 * (1 + 0.06 * (1 - 1 / 48)), 3.0, 0.12])
    scores, noise_only = [], []
    for seed in range(6):
        orders = odd_orders(61, seed)
        run = distorted_run(multisine(orders, seed), seed, before=slightly_cubic, noise=0.1)
        motion = estimate_motion(Record.from_run(run))
        found = measure_response(motion)
        assert found.distorted
        own = np.diag(found.covariance)[:3]
        scores.append((motion.weighted.fit.parameters.model.vector[:3] - truth) ** 2 / own)
        noise_only.append(np.diag(motion.weighted.covariance)[:3] / own)
    assert 1 / 4 < np.mean(scores) < 4 * 5 / 3
    assert np.median(noise_only) < 1 / 50


def test_even_distortion_leaves_the_lines_alone() -> None:
    """With odd lines only, second-order products fall between them: the variance is that of the noise."""
    found = measure(1, slightly_square)
    assert found.distortion is not None
    even = found.distortion.of(EVEN)
    below = even.frequency < 4
    assert np.median(even.level[below] / even.noise[below]) > 5
    odd = found.distortion.of(ODD)
    assert np.max(odd.level / odd.noise) < 4
    assert found.response.nonlinear is None
    np.testing.assert_array_equal(found.response.noise_variance, found.response.variance)


def test_the_variance_splits_into_noise_and_distortion() -> None:
    """What was added to the noise is what `nonlinear` says, in the recorded angle; within a factor of three of the true
    level at the odd lines left out (the mean of five lines has a relative deviation of some 0.5).
    """
    found = measure(2, slightly_cubic)
    response = found.response
    assert response.nonlinear is not None and found.distortion is not None
    ratio = (response.noise**2 + response.nonlinear**2) / response.noise**2
    np.testing.assert_allclose(response.variance, response.noise_variance * ratio, rtol=1e-9)
    truth = true_amplitudes(multisine(odd_orders(61, 2), 2), before=slightly_cubic)
    odd = found.distortion.of(ODD)
    left_out = truth[np.round(odd.frequency * PERIOD).astype(int)]
    relative = np.sqrt(np.mean((left_out / odd.linear) ** 2))
    carried = np.sqrt(np.mean((response.nonlinear / (response.gain * response.input_amplitude)) ** 2))
    assert relative / 3 < carried < 3 * relative


def test_a_straight_rig_is_hardly_ever_called_distorted() -> None:
    """At 5 % a record: more than four of eight would be one in 50 000."""
    assert sum(measure(seed).distorted for seed in range(8)) <= 4


def response_of(variance: Floats) -> FrequencyResponse:
    """The vane's own response at 40 lines with a given complex variance."""
    frequency = np.linspace(0.5, 8.0, 40)
    ones = np.ones(40)
    return FrequencyResponse(
        frequency=frequency,
        response=VANE.response(frequency),
        variance=variance,
        coherence=ones,
        noise=np.sqrt(variance),
        input_amplitude=ones,
        degrees_of_freedom=100 * ones,
        angle_unit="deg",
        method="periodic",
    )


def test_the_covariance_is_the_scatter_of_the_weighted_fit() -> None:
    """Brute force: 4000 draws of distortion (relative 0.01) through a linear fit weighted with the noise; variances
    agree within five of sqrt(2 / 4000), 11 %. A held delay has none.
    """
    rng = np.random.default_rng(1)
    measured = response_of(1e-4 * np.linspace(1.0, 3.0, 40))
    known = NonlinearVariance(relative=np.full(40, 1e-4), at=measured.frequency)
    slope = VANE.sensitivity(measured.frequency) / np.sqrt(measured.variance)[:, None]
    stacked = np.concatenate([slope.real, slope.imag])
    draws = (rng.standard_normal((40, 4000)) + 1j * rng.standard_normal((40, 4000))) / np.sqrt(2)
    moved = (0.01 * measured.gain / np.sqrt(measured.variance))[:, None] * draws
    estimates = np.linalg.lstsq(stacked, np.concatenate([moved.real, moved.imag]), rcond=None)[0]
    covariance = known.covariance(measured, VANE, held=())
    np.testing.assert_allclose(np.diag(covariance), np.var(estimates, axis=1), rtol=0.11)
    held = known.covariance(measured, VANE, held=(3,))
    assert np.all(held[3] == 0) and np.all(np.diag(held)[:3] > 0)


def test_without_levels_nothing_is_known() -> None:
    """No detection lines, or even ones only: None."""
    measured = response_of(np.full(40, 1e-4))
    assert nonlinear_variance(None, measured) is None
    ones = np.ones(3)
    even = DistortionLevels(
        frequency=np.array([1.0, 2.0, 3.0]),
        power=ones,
        power_uncertainty=0.1 * ones,
        noise=0.1 * ones,
        linear=10 * ones,
        noise_freedom=100 * ones,
        parity=np.full(3, EVEN),
    )
    assert nonlinear_variance(even, measured) is None


def test_degrees_of_freedom_of_a_sum_lie_between_those_of_its_parts() -> None:
    """Almost all distortion: those of five lines; hardly any: those of the noise."""
    measured = response_of(np.full(40, 1e-4))
    at = np.linspace(0.7, 7.9, 10)
    loud, _ = NonlinearVariance(relative=np.full(40, 10.0), at=at).added_to(measured, 2000.0)
    quiet, together = NonlinearVariance(relative=np.full(40, 1e-12), at=at).added_to(measured, 2000.0)
    assert loud.degrees_of_freedom == pytest.approx(5.0, rel=1e-2)
    assert quiet.degrees_of_freedom == pytest.approx(100.0, rel=1e-2)
    assert together == pytest.approx(2000.0, rel=1e-2)


def test_joint_degrees_of_freedom_of_the_gum() -> None:
    """JCGM 100:2008, H.1: 25, 5.8, 3.9, 6.7, 2.9 and 16.6 nm with 18, 24, 5, 8, 50 and 2 degrees (confirmed)
    make 32 nm with 16 effective degrees (from memory; 16.75 by an independent computation).
    """
    parts = [(25.0, 18), (5.8, 24), (3.9, 5), (6.7, 8), (2.9, 50), (16.6, 2)]
    total, freedom = np.array([[parts[0][0] ** 2]]), float(parts[0][1])
    for part, degrees in parts[1:]:
        freedom = joint_freedom(total, np.array([[part**2]]), freedom, float(degrees))
        total = total + part**2
    assert float(np.sqrt(total[0, 0])) == pytest.approx(32, abs=0.5)
    assert int(freedom) == 16
    assert freedom == pytest.approx(16.75, abs=0.01)
