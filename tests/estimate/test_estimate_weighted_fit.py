"""The covariance: the textbook formula in white noise, honest in coloured noise, and indifferent to units."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from scipy.signal import lfilter

from freqid.estimate.frame_grid import FrameGrid
from freqid.estimate.noise_spectrum import NoiseSpectrum
from freqid.estimate.prediction import MotionParameters
from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit, refine
from freqid.estimate.weighted_fit import covariance_of, fit_weighted
from freqid.records import InputStream, Run
from freqid.second_order import SecondOrder

Recorder = Callable[..., Run]


def flat(grid: FrameGrid, level: float) -> NoiseSpectrum:
    """White noise of known variance."""
    n = len(grid.frequency)
    return NoiseSpectrum(
        frequency=grid.frequency,
        level=np.full(n, level),
        degrees_of_freedom=np.full(n, 40.0),
        usable=np.ones(n, dtype=bool),
    )


def prepared(run: Run, model: SecondOrder) -> tuple[Record, RecordFit]:
    """Record and fit from the truth."""
    record = Record.from_run(run)
    fit = refine(record, MotionParameters(model=model))
    assert fit is not None
    return record, fit


def white_covariance(fit: RecordFit, variance: float) -> np.ndarray:
    """s^2 (J'J)^-1, scaled for the solution's sake."""
    j = fit.prediction.jacobian
    scale = 1 / np.linalg.norm(j, axis=0)
    return np.asarray(np.linalg.inv((j * scale).T @ (j * scale)) * np.outer(scale, scale) * variance)


@pytest.mark.parametrize("kind", ["short_multisine", "short_sweep", "short_steps"])
def test_white_weights_are_ordinary_least_squares(
    kind: str, request: pytest.FixtureRequest, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """On a full grid a flat spectrum weighs nothing: same optimum, covariance s^2 (J'J)^-1; inversion good to 1e-6."""
    record, fit = prepared(recorded(request.getfixturevalue(kind), vane_model, noise=0.3, seed=1), vane_model)
    weighted = fit_weighted(record, fit, flat(FrameGrid.from_stamps(record.stamp), 0.09))
    expected = white_covariance(weighted.fit, 0.09)
    scale = np.sqrt(np.diag(expected))
    np.testing.assert_allclose(
        weighted.covariance / np.outer(scale, scale), expected / np.outer(scale, scale), atol=1e-6
    )
    # both optima to within a hundredth of an uncertainty
    move = weighted.fit.parameters.model.vector - fit.parameters.model.vector
    assert np.all(np.abs(move) < 0.01 * scale[:4])


def test_lost_frames_cost_what_they_carried(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """With 30 % of the frames lost and white noise the covariance is that of the frames that are left: gaps are no
    noise.

    Off the grid's full circle the spectra of the columns smear into one another; with a flat spectrum that changes
    nothing.
    """
    record, fit = prepared(recorded(short_multisine, vane_model, noise=0.3, lost_frames=0.3, seed=2), vane_model)
    weighted = fit_weighted(record, fit, flat(FrameGrid.from_stamps(record.stamp), 0.09))
    expected = white_covariance(weighted.fit, 0.09)
    np.testing.assert_allclose(np.diag(weighted.covariance), np.diag(expected), rtol=1e-5)


@pytest.mark.parametrize(
    ("kind", "pole"),
    [
        ("short_multisine", 0.7),
        ("short_steps", 0.7),
        ("short_multisine", 0.95),
        ("short_steps", 0.95),
    ],
)
def test_covariance_is_the_scatter_in_coloured_noise(
    kind: str, pole: float, request: pytest.FixtureRequest, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Noise of first order, 60 seeds: stated variance of each parameter over the scatter's.

    60 seeds know a variance to sqrt(2 / 59) = 18 %: four of it, 0.74, either way in the logarithm. The residual's
    spectrum adds its smoothing; a formula for white noise would be wrong for the gain by a factor up to (1 + pole) /
    (1 - pole), 5.7 or 39.
    """
    drive: InputStream = request.getfixturevalue(kind)
    quiet = recorded(drive, vane_model)
    record, exact = prepared(quiet, vane_model)
    j = exact.prediction.jacobian
    estimates, stated = [], []
    for seed in range(60):
        white = np.random.default_rng(seed).standard_normal(len(record.angle) + 400)
        noise = 0.05 * lfilter([1.0], [1.0, -pole], white)[400:]
        step, *_ = np.linalg.lstsq(j, noise, rcond=None)
        left = noise - j @ step
        fit = RecordFit(parameters=exact.parameters, prediction=exact.prediction, residual=left)
        estimates.append(step)
        stated.append(np.diag(covariance_of(record, fit).covariance))
    ratio = np.mean(stated, axis=0) / np.var(estimates, axis=0, ddof=1)
    assert np.all(np.abs(np.log(ratio[:4])) < 0.74)


def test_units_of_the_angle_scale_the_covariance(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """In rad the gain's variance shrinks by (pi / 180)^2, that of the frequency stays."""
    variances = []
    for factor in (1.0, np.pi / 180):
        model = SecondOrder.from_vector(vane_model.vector * [factor, 1, 1, 1])
        run = recorded(short_sweep, model, noise=0.3 * factor, seed=3)
        variances.append(np.diag(covariance_of(*prepared(run, model)).covariance)[:4])
    np.testing.assert_allclose(variances[1] / variances[0], [(np.pi / 180) ** 2, 1, 1, 1], rtol=1e-3)
