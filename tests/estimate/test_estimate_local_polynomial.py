"""The local polynomial method is exact on polynomials, and its noise and variance are what it claims.

Source of the degrees of freedom and of the factor q / (q - 1): Schoukens, Vandersteen, Barbe & Pintelon, IEEE TIM
62(5) 2013, 1346-1353.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from freqid.errors import EstimationError
from freqid.estimate.local_polynomial import fit_locally, local_polynomial_response
from freqid.estimate.prediction import MotionParameters
from freqid.estimate.record import Record
from freqid.estimate.record_fit import refine
from freqid.records import InputStream, Run
from freqid.second_order import SecondOrder

Recorder = Callable[..., Run]
BINS = 120


def spectra(rng: np.random.Generator, order: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Output, input and true response: response and transient are polynomials over all bins."""
    k = np.arange(BINS) / BINS
    drive = rng.normal(size=BINS) + 1j * rng.normal(size=BINS)
    response = sum((rng.normal() + 1j * rng.normal()) * k**n for n in range(order + 1))
    transient = sum((rng.normal() + 1j * rng.normal()) * k**n for n in range(order + 1))
    return response * drive + transient, drive, np.asarray(response)


@pytest.mark.parametrize(("half_window", "order"), [(4, 2), (7, 2), (6, 1), (9, 4)])
def test_an_exactly_polynomial_response_is_found_exactly(half_window: int, order: int) -> None:
    """Response and transient of the method's own order: nothing is left over.

    Rounding, magnified by the window's condition; the noise is a difference of two sums of squares of some 100 in
    all, each good to 1e-15.
    """
    output, drive, response = spectra(np.random.default_rng(order), order)
    centre = np.arange(half_window, BINS - half_window)
    local = fit_locally(output, drive, centre, half_window=half_window, order=order)
    np.testing.assert_allclose(local.response, response[centre], atol=1e-9)
    assert np.max(local.noise) < 1e-12
    assert local.degrees_of_freedom == 2 * half_window + 1 - 2 * (order + 1)


@pytest.mark.parametrize(
    ("half_window", "order", "degrees"), [(3, 2, 1), (4, 2, 3), (5, 2, 5), (6, 2, 7), (8, 2, 11), (9, 4, 9)]
)
def test_degrees_of_freedom_are_the_published_ones(half_window: int, order: int, degrees: int) -> None:
    """q = 2 n + 1 - 2 (R + 1) for the pairs (n, R) of the paper."""
    output, drive, _ = spectra(np.random.default_rng(1), order)
    local = fit_locally(output, drive, np.array([60]), half_window=half_window, order=order)
    assert local.degrees_of_freedom == degrees


def test_a_window_is_the_plain_least_squares() -> None:
    """One window by the normal equations, written out."""
    rng = np.random.default_rng(2)
    output, drive, _ = spectra(rng, 2)
    output = output + rng.normal(size=BINS)
    r = np.arange(-4, 5)
    u, y = drive[50 + r], output[50 + r]
    design = np.stack([u, u * r, u * r**2, np.ones(9), r, r**2], axis=1).astype(complex)
    inverse = np.linalg.inv(design.conj().T @ design)
    theta = inverse @ design.conj().T @ y
    noise = np.sum(np.abs(y - design @ theta) ** 2) / 3
    local = fit_locally(output, drive, np.array([50]), half_window=4, order=2)
    assert local.response[0] == pytest.approx(theta[0], rel=1e-9)
    assert local.noise[0] == pytest.approx(noise, rel=1e-9)
    assert local.variance[0] == pytest.approx(noise * inverse[0, 0].real, rel=1e-9)


@pytest.mark.parametrize("half_window", [4, 7])
def test_noise_and_variance_are_unbiased(half_window: int) -> None:
    """Complex noise of variance 0.25 on a polynomial response, over 40 seeds of separate windows.

    The noise estimate has q complex degrees of freedom: relative s.d. 1 / sqrt(q) each, five of the mean's. Error
    squared over estimated variance has the mean q / (q - 1), for it is Fisher's F with 2 and 2 q degrees of freedom;
    its own s.d. follows.
    """
    centre = np.arange(half_window, BINS - half_window, 2 * half_window + 1)
    noise, error = [], []
    for seed in range(40):
        rng = np.random.default_rng(seed)
        output, drive, response = spectra(rng, 2)
        output = output + 0.5 * (rng.normal(size=BINS) + 1j * rng.normal(size=BINS)) / np.sqrt(2)
        local = fit_locally(output, drive, centre, half_window=half_window, order=2)
        noise.extend(local.noise)
        error.extend(np.abs(local.response - response[centre]) ** 2 / local.variance)
    q, n = local.degrees_of_freedom, len(noise)
    assert np.mean(noise) == pytest.approx(0.25, rel=5 / np.sqrt(q * n))
    # variance of F(2, 2q): 2 (2q)^2 (2q) / (2 (2q - 2)^2 (2q - 4)), finite for q > 2
    spread = np.sqrt(2 * (2 * q) ** 2 * (2 * q) / (2 * (2 * q - 2) ** 2 * (2 * q - 4)))
    assert np.mean(error) == pytest.approx(q / (q - 1), abs=5 * spread / np.sqrt(n))


def test_scaling_invariances() -> None:
    """Twice the output doubles the response and quadruples its variance; twice the input halves and quarters them."""
    output, drive, _ = spectra(np.random.default_rng(3), 2)
    output = output + np.random.default_rng(4).normal(size=BINS)
    centre = np.array([30, 60, 90])
    plain = fit_locally(output, drive, centre)
    louder, stronger = fit_locally(2 * output, drive, centre), fit_locally(output, 2 * drive, centre)
    np.testing.assert_allclose(louder.response, 2 * plain.response, rtol=1e-10)
    np.testing.assert_allclose(louder.variance, 4 * plain.variance, rtol=1e-10)
    np.testing.assert_allclose(stronger.response, plain.response / 2, rtol=1e-10)
    np.testing.assert_allclose(stronger.variance, plain.variance / 4, rtol=1e-10)


@pytest.mark.parametrize("kind", ["short_sweep", "short_steps", "short_multisine"])
def test_a_noisy_record_gives_the_true_response_within_its_variance(
    kind: str, request: pytest.FixtureRequest, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Ten seeds, independent points: mean of error squared over variance q / (q - 1), s.d. of F(2, 2q) /
    sqrt(points); five of them.

    Points are kept where the input stands out by itself (a multisine's windows hold lines and gaps).
    """
    drive: InputStream = request.getfixturevalue(kind)
    error: list[float] = []
    for seed in range(10):
        record = Record.from_run(recorded(drive, vane_model, noise=0.3, exposure=0.008, seed=seed))
        fit = refine(record, MotionParameters(model=vane_model), evaluations=6)
        assert fit is not None
        measured, independent = local_polynomial_response(record, fit)
        f = measured.frequency[independent]
        error.extend(
            np.abs(measured.response[independent] - vane_model.response(f)) ** 2 / measured.variance[independent]
        )
    q = measured.degrees_of_freedom[0] / 2
    assert q == 9
    spread = np.sqrt(2 * (2 * q) ** 2 * (2 * q) / (2 * (2 * q - 2) ** 2 * (2 * q - 4)))
    assert np.mean(error) == pytest.approx(q / (q - 1), abs=5 * spread / np.sqrt(len(error)))


def test_independent_points_share_no_bin(short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder) -> None:
    """Fifteen bins to a window: independent centres stand at least that far apart, and frequencies rise."""
    record = Record.from_run(recorded(short_sweep, vane_model, noise=0.3))
    fit = refine(record, MotionParameters(model=vane_model))
    assert fit is not None
    measured, independent = local_polynomial_response(record, fit)
    resolution = 1 / (len(record.stamp) * record.frame_interval)
    assert np.all(np.diff(measured.frequency) > 0)
    assert np.min(np.diff(measured.frequency[independent])) > 14.9 * resolution
    assert independent.sum() >= 4


def test_too_few_frames_are_refused(short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder) -> None:
    """A window needs its bins; the message says how many frames that is."""
    run = recorded(short_sweep, vane_model, noise=0.1)
    inside = slice(120, 148)
    short = replace(run, angle=replace(run.angle, time=run.angle.time[inside], angle=run.angle.angle[inside]))
    record = Record.from_run(short)
    fit = refine(record, MotionParameters(model=vane_model))
    assert fit is not None
    with pytest.raises(EstimationError) as told:
        local_polynomial_response(record, fit)
    assert str(told.value) == "28 frames are too few for a frequency response (32 are needed): record longer"


@pytest.mark.parametrize("frames", [32, 33, 34, 36, 40])
def test_as_many_frames_as_the_message_asks_for_are_enough(
    frames: int, short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """The limit that the message names is the limit."""
    run = recorded(short_sweep, vane_model, noise=0.1)
    inside = slice(120, 120 + frames)
    short = replace(run, angle=replace(run.angle, time=run.angle.time[inside], angle=run.angle.angle[inside]))
    record = Record.from_run(short)
    fit = refine(record, MotionParameters(model=vane_model))
    assert fit is not None
    measured, _ = local_polynomial_response(record, fit)
    assert len(measured.frequency) >= 1
