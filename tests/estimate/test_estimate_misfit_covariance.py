"""Intervals of a model that does not fit: they hold what another excitation would have given, and never fall below what
the noise demands.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest
from numpy.typing import NDArray

from excitation import Limits, SweptSineSettings, design_swept_sine
from freqid.capture.simulated_rig import input_from_profile
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.misfit_covariance import enlarged_by_lines, enlarged_by_stretches
from freqid.estimate.motion import parameter_covariance
from freqid.estimate.prediction import MotionParameters
from freqid.estimate.record import Record
from freqid.estimate.record_fit import refine
from freqid.estimate.weighted_fit import covariance_of
from freqid.held_response import HeldResponse
from freqid.quantity import coverage_factor
from freqid.records import InputStream, Run
from freqid.second_order import SecondOrder

Floats = NDArray[np.float64]
Recorder = Callable[..., Run]
SECOND_MODES = ((1.0, 6.0, 0.1), (0.3, 9.0, 0.05), (-0.5, 4.5, 0.1))  # gain in deg/V, Hz, damping ratio


@pytest.fixture(scope="module")
def drives(vane_model: SecondOrder, short_sweep: InputStream, short_steps: InputStream) -> list[InputStream]:
    """Sweeps of several bands and lengths, one run backwards, and steps."""
    limits = Limits(voltage=5.0, slew_rate=500.0, angle=30.0)

    def sweep(low: float, high: float, duration: float) -> InputStream:
        settings = SweptSineSettings(
            band=(low, high), duration=duration, sample_rate=500.0, limits=limits, rigs=(vane_model,)
        )
        return input_from_profile(design_swept_sine(settings))

    backwards = replace(short_sweep, voltage=short_sweep.voltage[::-1].copy())
    return [short_sweep, backwards, sweep(1.0, 6.0, 24.0), sweep(0.5, 12.0, 16.0), short_steps]


def fitted(run: Run, model: SecondOrder, second: tuple[float, float, float] | None) -> tuple[Floats, Floats, Floats]:
    """Parameters (3,), half intervals (3,) from the residual's spectrum, and enlarged ones; the delay is left aside."""
    record = Record.from_run(run)
    if second is not None:
        gain, frequency, damping = second
        beside = HeldResponse(record.drive, frequency, damping).mean(record.stamp - model.delay, 0.0)
        record = replace(record, angle=record.angle + gain * beside)
    fit = refine(record, MotionParameters(model=model))
    assert fit is not None
    weighted = covariance_of(record, fit)
    plain = parameter_covariance(weighted)
    enlarged = enlarged_by_stretches(weighted, plain)
    halves = [
        coverage_factor(freedom) * np.sqrt(np.diag(covariance))[:3]
        for covariance, freedom in (
            (plain, weighted.degrees_of_freedom), (enlarged.covariance, enlarged.degrees_of_freedom),
        )
    ]  # fmt: skip
    return fit.parameters.model.vector[:3], halves[0], halves[1]


def test_another_excitation_of_an_unmodelled_rig_gives_what_the_interval_says(
    drives: list[InputStream], vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Three rigs with a second mode, five excitations each: of the 90 differences between two fits at least 95 % lie
    within both 95 % intervals together. From the spectrum of the residual alone fewer than 75 % do.
    """
    plain, enlarged = [], []
    for second in SECOND_MODES:
        found = [fitted(recorded(drive, vane_model, noise=0.05, seed=1), vane_model, second) for drive in drives]
        for one, other in combinations(found, 2):
            difference = np.abs(one[0] - other[0])
            plain.append(difference <= np.hypot(one[1], other[1]))
            enlarged.append(difference <= np.hypot(one[2], other[2]))
    assert np.size(enlarged) == 90
    assert np.mean(enlarged) >= 0.95
    assert np.mean(plain) < 0.75


def test_an_adequate_model_would_hardly_be_enlarged(
    drives: list[InputStream], vane_model: SecondOrder, recorded: Recorder
) -> None:
    """On noise alone the stretches' own variance is chi-square with seven degrees about the true one: the enlargement
    of a deviation, at least 1, is 1.1 on average and 1.68 in 1 of 200 (chi-square of 20.3 / 7); 30 ratios stay below
    2.2 (one in 10^5 above).
    """
    ratios = []
    for seed in range(10):
        _, plain, enlarged = fitted(recorded(drives[0], vane_model, noise=0.3, seed=seed), vane_model, None)
        ratios.append(enlarged / plain / (coverage_factor(7) / coverage_factor(1e6)))
    assert np.min(ratios) > 0.95
    assert np.max(ratios) < 2.2
    assert np.mean(ratios) < 1.3


def lines(model: SecondOrder, misfit: NDArray[np.complex128]) -> FrequencyResponse:
    """Forty lines with a relative misfit and relative noise of 1e-3."""
    frequency = np.linspace(0.5, 8.0, 40)
    ones = np.ones(40)
    response = model.response(frequency)
    return FrequencyResponse(
        frequency=frequency,
        response=response * (1 + misfit),
        variance=np.abs(response) ** 2 * 1e-6,
        coherence=ones,
        noise=ones,
        input_amplitude=ones,
        degrees_of_freedom=100 * ones,
        angle_unit="deg",
        method="periodic",
    )


def test_a_misfit_that_leans_one_way_weighs_more_than_one_that_alternates(vane_model: SecondOrder) -> None:
    """The same size of misfit: in one direction over a quarter of the lines it moves the parameters, from line to line
    it cancels within every stretch, but for a rest where one stretch holds few lines. More than twice the variance
    tells them apart; nothing falls below what noise demands.
    """
    covariance = np.diag([1e-6, 1e-8, 1e-10, 1e-12])
    alternating = 0.01 * (-1.0) ** np.arange(40) + 0j
    leaning = 0.01 * np.where(np.arange(40) // 10 % 2 == 0, 1.0, -1.0) + 0j
    one = enlarged_by_lines(lines(vane_model, alternating), vane_model, covariance, held=())
    other = enlarged_by_lines(lines(vane_model, leaning), vane_model, covariance, held=())
    assert np.all(np.diag(other.covariance) > 2 * np.diag(one.covariance))
    assert np.all(np.diag(one.covariance) >= np.diag(covariance))
    assert other.degrees_of_freedom <= 7


def test_a_held_delay_keeps_no_variance(vane_model: SecondOrder) -> None:
    """What was not fitted is not enlarged."""
    covariance = np.diag([1e-6, 1e-8, 1e-10, 0.0])
    found = enlarged_by_lines(lines(vane_model, np.full(40, 0.01 + 0j)), vane_model, covariance, held=(3,))
    assert found.covariance[3, 3] == 0
    assert np.all(np.diag(found.covariance)[:3] >= np.diag(covariance)[:3])
