"""What do the lines (or the bins) say about the model? Response, distortion, and the test of the model against them.

Where odd distortion is significant, the variance of the response contains it, and the model is tested against both:
what the phases of the excitation make of a nonlinear rig is no fault of the model.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.adequacy import lack_of_fit
from freqid.estimate.distortion import DistortionLevels, distortion_levels
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.local_polynomial import local_polynomial_response
from freqid.estimate.model import Adequacy
from freqid.estimate.motion import Motion, parameter_covariance
from freqid.estimate.nonlinear_variance import nonlinear_variance
from freqid.estimate.periodic import LineRegression, periodic_response

__all__ = ["MeasuredResponse", "joint_freedom", "measure_response"]

Floats = NDArray[np.float64]
POOLED = 4  # independent points on either side that share their noise estimate


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MeasuredResponse:
    """The response, the test of the model against it, which of its points are independent of each other (F,), the
    distortion as far as it is known, and the covariance (4, 4) of the parameters with that distortion in it, resting on
    `degrees_of_freedom`. `distorted` is true where it was significant.
    """

    response: FrequencyResponse
    adequacy: Adequacy
    independent: NDArray[np.bool_]
    covariance: Floats
    degrees_of_freedom: float
    distortion: DistortionLevels | None = None
    distorted: bool = False


def measure_response(motion: Motion) -> MeasuredResponse:
    """The response around a fitted motion: at the lines of a periodic voltage, else by the local polynomial method."""
    if motion.lines is not None:
        return _at_lines(motion, motion.lines)
    record, fit = motion.record, motion.weighted.fit
    measured, independent = local_polynomial_response(record, fit)
    pooled = _pool_noise(measured, independent)
    freedom = float(np.sum(measured.degrees_of_freedom[independent]))
    return MeasuredResponse(
        response=measured,
        adequacy=lack_of_fit(pooled, fit.parameters.model, noise_freedom=freedom, use=independent),
        independent=independent,
        covariance=parameter_covariance(motion.weighted),
        degrees_of_freedom=motion.weighted.degrees_of_freedom,
    )


def _at_lines(motion: Motion, lines: LineRegression) -> MeasuredResponse:
    record, fit, covariance = motion.record, motion.weighted.fit, parameter_covariance(motion.weighted)
    model, degrees = fit.parameters.model, motion.weighted.degrees_of_freedom
    measured, freedom = periodic_response(record, fit, lines)
    levels = distortion_levels(record, fit, lines, measured)
    known = nonlinear_variance(levels, measured)
    if known is not None:
        held = tuple(number for number in range(4) if number not in fit.prediction.free)
        own = known.covariance(measured, model, held=held)
        degrees = joint_freedom(covariance, own, degrees, known.freedom_near(model.natural_frequency))
        covariance = covariance + own
        measured, freedom = known.added_to(measured, freedom)
    return MeasuredResponse(
        response=measured,
        adequacy=lack_of_fit(measured, model, noise_freedom=freedom),
        independent=np.ones(len(measured.frequency), dtype=bool),
        covariance=covariance,
        degrees_of_freedom=degrees,
        distortion=levels,
        distorted=known is not None,
    )


def joint_freedom(first: Floats, second: Floats, first_freedom: float, second_freedom: float) -> float:
    """Degrees of freedom of the least certain variance of a sum of two covariances (N, N) with their own.

    Source: Welch and Satterthwaite, JCGM 100:2008, G.4.
    """
    one, other = np.diag(first), np.diag(second)
    known = one + other > 0
    share = other[known] / (one + other)[known]
    return float(np.min(1 / ((1 - share) ** 2 / first_freedom + share**2 / second_freedom)))


def _pool_noise(measured: FrequencyResponse, independent: NDArray[np.bool_]) -> FrequencyResponse:
    """Noise of each point averaged with its independent neighbours: nine complex degrees of freedom are few."""
    power = measured.noise[independent] ** 2
    total = np.concatenate([[0.0], np.cumsum(power)])
    order = np.arange(len(power))
    low, high = np.maximum(order - POOLED, 0), np.minimum(order + POOLED + 1, len(power))
    smooth = (total[high] - total[low]) / (high - low)
    variance, freedom = measured.variance.copy(), measured.degrees_of_freedom.copy()
    variance[independent] *= smooth / power
    freedom[independent] *= high - low
    return replace(measured, variance=variance, degrees_of_freedom=freedom)
