"""How does the uncertainty of the four parameters reach a quantity computed from them?

Linearly and with correlations where the quantity is smooth; as a range over the joint 95 % region where it jumps.

Source: JCGM 100:2008 (GUM), 5.1.3 note 2 and 5.2.2; the joint region is the usual ellipsoid of a normal estimate.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from freqid.errors import EstimationError
from freqid.second_order import PARAMETER_ORDER as NAMES
from freqid.step_relations import normalised_settling_time

__all__ = [
    "DAMPING",
    "DELAY",
    "FREQUENCY",
    "GAIN",
    "NAMES",
    "Estimate",
    "Spread",
    "checked_estimate",
    "joint_radius",
    "propagated",
    "settling_range",
]

Floats = NDArray[np.float64]

GAIN, FREQUENCY, DAMPING, DELAY = range(4)
# Slices of the joint region along the damping ratio; odd, so that the estimate itself is one of them.
N_SLICES = 401
LEAST_DAMPING = 1e-9  # stands in for zero and below while a sensitivity is taken


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Estimate:
    """The parameters with their covariance, checked."""

    point: Floats  # (4,)
    covariance: Floats  # (4, 4)
    degrees_of_freedom: float

    @property
    def uncertainties(self) -> Floats:
        """Standard uncertainties of the four parameters, (4,)."""
        return np.sqrt(np.maximum(np.diag(self.covariance), 0.0))


def checked_estimate(parameters: ArrayLike, covariance: ArrayLike, degrees_of_freedom: float) -> Estimate:
    """The parameters (4,) with their covariance (4, 4), in the order gain, natural frequency, damping ratio, delay.

    Raises
    ------
    EstimationError
        Shapes differ, a parameter is not finite, natural frequency or damping ratio is not positive, or a variance is
        negative. A variance that is not finite is allowed: that parameter is undetermined.
    """
    point = np.array(parameters, dtype=np.float64)
    matrix = np.array(covariance, dtype=np.float64)
    if point.shape != (4,) or matrix.shape != (4, 4):
        raise EstimationError(
            f"parameters of shape {point.shape} with covariance of shape {matrix.shape}: give (4,) and (4, 4), "
            f"in the order {', '.join(NAMES)}"
        )
    for name, value in zip(NAMES, point, strict=True):
        if not math.isfinite(value) or (name in ("natural_frequency", "damping_ratio") and value <= 0):
            raise EstimationError(f"{name} = {value:g}: must be finite, and above 0 unless it is gain or delay")
    for name, variance in zip(NAMES, np.diag(matrix), strict=True):
        if variance < 0:
            raise EstimationError(f"covariance: the variance of {name} is {variance:g}, below 0; estimate it anew")
    return Estimate(point=point, covariance=matrix, degrees_of_freedom=degrees_of_freedom)


def propagated(function: Callable[[Floats], float], estimate: Estimate, depends_on: list[int]) -> float:
    """Standard uncertainty by JCGM 100, 5.2.2, with changes over ± one standard uncertainty in place of derivatives."""
    changes = np.array([_change(function, estimate, index) for index in depends_on])
    scale = estimate.uncertainties[depends_on]
    scale[scale == 0] = 1.0  # a parameter without uncertainty changes nothing
    correlation = estimate.covariance[np.ix_(depends_on, depends_on)] / np.outer(scale, scale)
    return math.sqrt(max(float(changes @ correlation @ changes), 0.0))


def _change(function: Callable[[Floats], float], estimate: Estimate, index: int) -> float:
    """Half the change of the function over ± one standard uncertainty of one parameter."""
    if index == DELAY:  # added to the time, whatever the time is
        return float(estimate.uncertainties[DELAY])
    step = np.zeros(4)
    step[index] = estimate.uncertainties[index]
    high, low = estimate.point + step, estimate.point - step
    low[DAMPING] = max(low[DAMPING], LEAST_DAMPING)
    return (function(high) - function(low)) / 2


@dataclass(frozen=True, slots=True, kw_only=True)
class Spread:
    """Standard uncertainty, lowest and highest value, all in the unit of the quantity."""

    standard_uncertainty: float
    low: float
    high: float


def settling_range(band: float, estimate: Estimate, depends_on: list[int]) -> Spread:
    """Range of a settling time, in s, over the joint 95 % region of the parameters it depends on.

    The region, an ellipsoid, is cut into slices of constant damping ratio. On each slice the remaining parameters
    (natural frequency, and the delay where it counts) fill a smaller ellipsoid about their conditional mean, over
    which the time is linear to good approximation; across the slices its jumps are met as they come. The standard
    uncertainty is half the range over the radius of the region, which is the propagated one where nothing jumps.
    """
    others = [index for index in depends_on if index != DAMPING]
    radius = joint_radius(len(depends_on), estimate.degrees_of_freedom)
    position = np.linspace(-1, 1, N_SLICES) if estimate.uncertainties[DAMPING] > 0 else np.zeros(1)
    mean, spread = _conditional(estimate, others, position * radius)
    damping = estimate.point[DAMPING] + position * radius * estimate.uncertainties[DAMPING]
    time = normalised_settling_time(damping, band) / (2 * math.pi * mean[:, 0])
    slope = np.ones_like(mean)
    slope[:, 0] = -time / mean[:, 0]
    total = time + mean[:, 1:].sum(axis=1)
    variance = np.einsum("si,ij,sj->s", slope, spread, slope)
    half = radius * np.sqrt(np.maximum((1 - position**2) * variance, 0.0))
    low, high = float(np.min(total - half)), float(np.max(total + half))
    return Spread(standard_uncertainty=(high - low) / (2 * radius), low=low, high=high)


def _conditional(estimate: Estimate, others: list[int], deviation: Floats) -> tuple[Floats, Floats]:
    """Mean (S, n) and covariance (n, n) of other parameters, damping ratio `deviation` (S,) uncertainties off."""
    uncertainty = float(estimate.uncertainties[DAMPING])
    shift = estimate.covariance[others, DAMPING] / uncertainty if uncertainty > 0 else np.zeros(len(others))
    mean = estimate.point[others] + np.outer(deviation, shift)
    return mean, estimate.covariance[np.ix_(others, others)] - np.outer(shift, shift)


def joint_radius(n_parameters: int, degrees_of_freedom: float) -> float:
    """Radius of the joint 95 % region in standard uncertainties, √(n·F₀.₉₅(n, ν)), from χ² where ν is infinite."""
    from scipy.special import chdtri, fdtri

    if math.isinf(degrees_of_freedom):
        return math.sqrt(float(chdtri(n_parameters, 0.05)))
    return math.sqrt(n_parameters * float(fdtri(n_parameters, max(degrees_of_freedom, 1.0), 0.95)))
