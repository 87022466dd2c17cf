"""How sure are the parameters where the model does not describe the record? As sure as its parts agree.

A misfit is no noise: it follows the motion, over long stretches in the same direction, and neither its spectrum nor its
size tells what it does to the parameters. So the record is cut into eight stretches that carry the same information,
frames in order of time, or lines in order of frequency where the misfit repeats with every period. Each stretch pulls
the parameters its own way,

    pull_b = (J' W J)^-1 sum over b of J' W e,      C = B / (B - 1) sum of pull_b pull_b'

and C is their covariance whatever correlation there is within a stretch. Eight stretches leave seven degrees of freedom
for Student's t. Another voltage weighs the stretches differently; that is the difference the interval allows for.

Source: Bester, Conley & Hansen, Journal of Econometrics 165 (2011) 137-151 (few large groups of dependent data, and
why t with B - 1 degrees of freedom).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.measured_response import MeasuredResponse
from freqid.estimate.motion import Motion
from freqid.estimate.weighted_fit import WeightedFit
from freqid.second_order import SecondOrder

__all__ = ["EnlargedCovariance", "enlarged_by_lines", "enlarged_by_misfit", "enlarged_by_stretches"]

Floats = NDArray[np.float64]
STRETCHES = 8


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EnlargedCovariance:
    """Covariance (4, 4) of the parameters and the degrees of freedom it rests on."""

    covariance: Floats
    degrees_of_freedom: float


def enlarged_by_misfit(motion: Motion, measured: MeasuredResponse) -> EnlargedCovariance:
    """The covariance of `measured` enlarged by what its inadequate model leaves over.

    At lines it is first enlarged by the misfit's mean square (Birge's ratio), which a misfit that changes from line to
    line needs; then each variance is raised to that from the stretches where this is larger.
    """
    covariance, model = measured.covariance, motion.weighted.fit.parameters.model
    if motion.lines is None:
        return enlarged_by_stretches(motion.weighted, covariance)
    ratio = max(1.0, measured.adequacy.statistic / measured.adequacy.degrees_of_freedom)
    held = tuple(number for number in range(4) if number not in motion.weighted.fit.prediction.free)
    return enlarged_by_lines(measured.response, model, covariance * ratio, held=held)


def enlarged_by_stretches(weighted: WeightedFit, covariance: Floats) -> EnlargedCovariance:
    """From the residual of the whole record in eight stretches of time; never smaller than `covariance` (4, 4)."""
    fit = weighted.fit
    jacobian, free = fit.prediction.jacobian, fit.prediction.free
    scale = np.linalg.norm(jacobian, axis=0)
    influence = (jacobian / scale) @ np.linalg.pinv((jacobian / scale).T @ (jacobian / scale)) / scale
    kept = [number for number in range(4) if number in free]
    chosen = influence[:, [free.index(number) for number in kept]]
    return _enlarged(covariance, kept, chosen, chosen * fit.residual[:, None])


def enlarged_by_lines(
    measured: FrequencyResponse, model: SecondOrder, covariance: Floats, *, held: tuple[int, ...]
) -> EnlargedCovariance:
    """From the misfit at the lines of `measured` in eight stretches of frequency; never smaller than `covariance`.

    `held` are the numbers of parameters that were not fitted.
    """
    kept = [number for number in range(4) if number not in held]
    slope = model.sensitivity(measured.frequency)[:, kept] / np.sqrt(measured.variance / 2)[:, None]
    misfit = (measured.response - model.response(measured.frequency)) / np.sqrt(measured.variance / 2)
    scale = np.linalg.norm(slope, axis=0)
    slope = slope / scale
    inverse = np.linalg.pinv(np.real(np.conj(slope).T @ slope), hermitian=True)
    influence = slope @ inverse / scale
    return _enlarged(covariance, kept, np.abs(influence), np.real(np.conj(influence) * misfit[:, None]))


def _enlarged(covariance: Floats, kept: list[int], influence: Floats, pulls: Floats) -> EnlargedCovariance:
    """`influence` (N, K) says how the information is spread over the points, `pulls` (N, K) what each does."""
    share = np.sum((influence / np.linalg.norm(influence, axis=0)) ** 2, axis=1)
    gone = np.cumsum(share) / np.sum(share)
    stretch = np.minimum((gone * STRETCHES).astype(np.intp), STRETCHES - 1)
    filled = np.unique(stretch)
    sums = np.array([np.sum(pulls[stretch == number], axis=0) for number in filled])
    count = len(filled)
    own = np.sum(sums**2, axis=0) * count / max(count - 1, 1)
    ratio = np.ones(4)
    stated = np.diag(covariance)[kept]
    ratio[kept] = np.maximum(own / np.where(stated > 0, stated, np.inf), 1.0)
    return EnlargedCovariance(
        covariance=covariance * np.sqrt(np.outer(ratio, ratio)), degrees_of_freedom=float(max(count - 1, 1))
    )
