"""What are the four parameters, and how sure are they jointly? Maximum likelihood with the measured noise.

The whole record is weighted, frequency by frequency, with the noise spectrum measured between the harmonics
(Gauss-Newton from
the unweighted fit). With weights W and noise covariance V the covariance is the sandwich

    (J' W J)^-1 (J' W V W J) (J' W J)^-1

which is the Cramer-Rao bound where W = V^-1 and stays honest where it is not. Clock ratio, rest angle and start are
estimated along and so are in the covariance: delay and clock ratio are correlated, and leaving that out spoils the
interval of the delay.

Source: Pintelon & Schoukens 2012, ch. 9 (sample maximum likelihood); L. Ljung 1999, ch. 9.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.frame_grid import FrameGrid
from freqid.estimate.noise_spectrum import NoiseSpectrum, noise_spectrum
from freqid.estimate.prediction import MotionParameters, predict
from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit

__all__ = ["AddedColumn", "WeightedFit", "covariance_of", "fit_column", "fit_weighted"]

Floats = NDArray[np.float64]
ITERATIONS = 4
LONGEST_STEP = 0.9  # of natural frequency and damping ratio: farther off, the record does not determine them
SETTLED = 1e-2  # of the standard uncertainties: a last step no longer than this leaves its square
MODEL = slice(0, 4)  # the columns of the model's own parameters


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WeightedFit:
    """The fit and the covariance (P, P) of its free parameters, numbered as in `fit.prediction.free`.

    `noise` is what the covariance rests on; `by_noise` tells whether the fit itself was weighted with it.
    """

    fit: RecordFit
    covariance: Floats
    degrees_of_freedom: float
    noise: NoiseSpectrum
    by_noise: bool


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class AddedColumn:
    """Coefficient of one more column with its standard uncertainty, and the `shift` (P,) it brings to the free
    parameters."""

    coefficient: float
    standard_uncertainty: float
    degrees_of_freedom: float
    shift: Floats


def fit_weighted(record: Record, fit: RecordFit, noise: NoiseSpectrum) -> WeightedFit:
    """Refine `fit` with weights from `noise`, a spectrum measured independently of the model."""
    grid = FrameGrid.from_stamps(record.stamp)
    level, freedom = noise.at(grid.frequency)
    free = list(fit.prediction.free)
    current = fit
    for _ in range(ITERATIONS):
        weighted = _weigh(grid, current.prediction.jacobian, level)
        normal = current.prediction.jacobian.T @ weighted
        step = _solve(normal, weighted.T @ current.residual)
        vector = current.parameters.vector
        vector[free] += step
        if np.any(np.abs(vector[1:3] / current.parameters.vector[1:3] - 1) > LONGEST_STEP):
            break
        parameters = MotionParameters.from_vector(vector)
        prediction = predict(record, parameters)
        current = RecordFit(parameters=parameters, prediction=prediction, residual=record.angle - prediction.angle)
        if np.all(np.abs(step) <= SETTLED * np.sqrt(np.diag(_inverse(normal)))):
            break
    weighted = _weigh(grid, current.prediction.jacobian, level)
    covariance, degrees = _sandwich(grid, current.prediction.jacobian, weighted, (level, freedom))
    return WeightedFit(fit=current, covariance=covariance, degrees_of_freedom=degrees, noise=noise, by_noise=True)


def covariance_of(record: Record, fit: RecordFit) -> WeightedFit:
    """Covariance of the unweighted fit with the spectrum of its own residual, misfit of the model included."""
    grid = FrameGrid.from_stamps(record.stamp)
    noise = noise_spectrum(fit.residual, grid, fitted=fit.prediction.jacobian)
    level, freedom = noise.at(grid.frequency)
    jacobian = fit.prediction.jacobian
    covariance, degrees = _sandwich(grid, jacobian, jacobian, (level, freedom))
    return WeightedFit(fit=fit, covariance=covariance, degrees_of_freedom=degrees, noise=noise, by_noise=False)


def fit_column(record: Record, weighted: WeightedFit, column: Floats) -> AddedColumn:
    """Fit one more column (N,) to the residual together with all free parameters, weighted as `weighted` was."""
    grid = FrameGrid.from_stamps(record.stamp)
    level, freedom = weighted.noise.at(grid.frequency)
    jacobian = np.column_stack([weighted.fit.prediction.jacobian, column])
    weighed = _weigh(grid, jacobian, level) if weighted.by_noise else jacobian
    change = _solve_symmetric(jacobian.T @ weighed, weighed.T @ weighted.fit.residual)
    last = jacobian.shape[1] - 1
    covariance, degrees = _sandwich(grid, jacobian, weighed, (level, freedom), judged=slice(last, None))
    return AddedColumn(
        coefficient=float(change[-1]),
        standard_uncertainty=float(np.sqrt(covariance[-1, -1])),
        degrees_of_freedom=degrees,
        shift=change[:-1],
    )


def _weigh(grid: FrameGrid, jacobian: Floats, level: Floats) -> Floats:
    return grid.back(grid.spectrum(jacobian) / level[:, None])


def _sandwich(
    grid: FrameGrid,
    jacobian: Floats,
    weighted: Floats,
    noise: tuple[Floats, Floats],
    *,
    judged: slice = MODEL,
) -> tuple[Floats, float]:
    """Covariance of the parameters and the degrees of freedom of the least certain of the `judged` variances.

    `noise` is the level and its degrees of freedom at every bin. Each variance is a weighted sum of levels; its
    degrees of
    freedom follow from theirs (Welch-Satterthwaite, JCGM 100 G.4), neighbours that share a window counted as one.
    """
    level, freedom = noise
    outer = _inverse(jacobian.T @ weighted)
    spectrum = grid.spectrum(weighted) @ outer
    power = (level * grid.multiplicity)[:, None]
    covariance = np.real(np.conj(spectrum).T @ (power * spectrum))
    share = power * np.abs(spectrum[:, judged]) ** 2
    width = max(int(np.median(freedom)) // 2, 1)
    pooled = np.add.reduceat(share, np.arange(0, len(share), width), axis=0)
    weakest = np.minimum.reduceat(freedom, np.arange(0, len(freedom), width))
    degrees = np.sum(pooled, axis=0) ** 2 / np.sum(pooled**2 / weakest[:, None], axis=0)
    return np.asarray(covariance), float(np.clip(np.min(degrees), 2.0, len(weighted) - jacobian.shape[1]))


def _solve(normal: Floats, right: Floats) -> Floats:
    scale = 1 / np.sqrt(np.diag(normal))
    return np.asarray(scale * np.linalg.solve(normal * np.outer(scale, scale), scale * right))


def _solve_symmetric(normal: Floats, right: Floats) -> Floats:
    """As `_solve`, with a normal matrix that may be all but singular."""
    return np.asarray(_inverse(normal) @ right)


def _inverse(normal: Floats) -> Floats:
    """Inverse of a badly scaled normal matrix; directions without information get a huge variance, not an error."""
    scale = 1 / np.sqrt(np.diag(normal))
    value, vector = np.linalg.eigh(normal * np.outer(scale, scale))
    value = np.maximum(value, 1e-14 * value.max())
    return np.asarray((vector / value) @ vector.T * np.outer(scale, scale))
