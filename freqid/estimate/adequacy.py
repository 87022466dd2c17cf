"""Does a second-order model describe the record within its noise? A lack-of-fit test.

    statistic = min over d of  sum 2 |G_measured - G_model - S d|^2 / variance,     S the model's sensitivity

is chi-square with 2 F - 4 degrees of freedom where the model is true (F complex points, four parameters). As each
variance is
itself an estimate with v degrees of freedom, each term is (v - 2) / v smaller than it looks (E[1 / chi-square] of v),
and the mean
square is referred to Fisher's F with all degrees of freedom of the noise.

What the likeliest alternatives leave behind has a known shape, and a test in that one direction finds it where it
drowns among many points (`feedthrough`). The three tests share the false alarms by Bonferroni's inequality:

    p = min(1, p_pole / 0.5, p_zero / 0.1, p_lack_of_fit / 0.4)

so at most 5 % of adequate records are below 0.05 (4.9 % where the tests are independent).

Source: N. Draper & H. Smith, *Applied Regression Analysis*, 3rd ed. 1998, ch. 2; Pintelon & Schoukens 2012, ch. 11.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.feedthrough import Feedthrough
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.model import Adequacy
from freqid.second_order import SecondOrder

__all__ = ["direction_told", "lack_of_fit", "whitened_misfit", "with_direction"]

Floats = NDArray[np.float64]
POLE_SHARE, ZERO_SHARE, LACK_OF_FIT_SHARE = 0.5, 0.1, 0.4  # of the false alarms


def whitened_misfit(measured: FrequencyResponse, model: SecondOrder) -> NDArray[np.complex128]:
    """Measured minus model in units of standard uncertainty of real and imaginary part, complex (F,)."""
    return (measured.response - model.response(measured.frequency)) / np.sqrt(measured.variance / 2)


def lack_of_fit(
    measured: FrequencyResponse, model: SecondOrder, *, noise_freedom: float, use: NDArray[np.bool_] | None = None
) -> Adequacy:
    """Test `model` against the independent points `use` (F,) of `measured`.

    `noise_freedom` is the total number of real degrees of freedom behind the variances.
    """
    from scipy.special import fdtrc

    use = np.ones(len(measured.frequency), dtype=bool) if use is None else use
    misfit = whitened_misfit(measured, model)[use]
    freedom = np.maximum(measured.degrees_of_freedom[use], 3.0)
    shrink = np.sqrt((freedom - 2) / freedom)
    misfit = misfit * shrink
    weight = shrink / np.sqrt(measured.variance[use] / 2)
    slope = model.sensitivity(measured.frequency[use]) * weight[:, None] * np.maximum(np.abs(model.vector), 1e-9)
    design = np.concatenate([slope.real, slope.imag])
    target = np.concatenate([misfit.real, misfit.imag])
    rest = target - design @ np.linalg.lstsq(design, target, rcond=None)[0]
    degrees = len(target) - 4
    if degrees < 1:
        return Adequacy(statistic=float("nan"), degrees_of_freedom=degrees, p_value=float("nan"))
    statistic = float(rest @ rest)
    p_value = float(fdtrc(degrees, max(noise_freedom, 1.0), statistic / degrees))
    return Adequacy(statistic=statistic, degrees_of_freedom=degrees, p_value=p_value)


def with_direction(lack: Adequacy, feedthrough: Feedthrough) -> Adequacy:
    """The lack-of-fit test and the directed tests for an extra pole or a zero as one, at the total false-alarm rate.

    Where the lack of fit could not be tested, nothing is tested.
    """
    if not np.isfinite(lack.p_value):
        return lack
    shared = min(
        lack.p_value / LACK_OF_FIT_SHARE,
        feedthrough.pole_p_value / POLE_SHARE,
        feedthrough.zero_p_value / ZERO_SHARE,
    )
    return replace(lack, p_value=float(min(shared, 1.0)))


def direction_told(feedthrough: Feedthrough) -> bool:
    """Whether the directed tests alone, at their share of the false alarms, tell of an extra pole or a zero."""
    return min(feedthrough.pole_p_value / POLE_SHARE, feedthrough.zero_p_value / ZERO_SHARE) < 0.05
