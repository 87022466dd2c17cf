"""What does the distortion do to the response and to the parameters of a single run?

Terms of odd order fall on excited lines as well. What of them comes and goes with the phases of the excitation acts
like noise that no averaging over periods removes; at the odd harmonics left out it stands alone, and from there it is
carried over to the lines, relative to the linear answer and averaged over five neighbours. It enters the variance of
the response and, through the weights of the fit, the covariance of the parameters:

    C = N^-1 [sum (2 / s_n^2)^2 (s_NL^2 / 2) Re(S^H S)] N^-1,    N = sum (2 / s_n^2) Re(S^H S)

with S the sensitivity of the response, s_n^2 and s_NL^2 the complex variances of noise and distortion. It is added
only where the distortion is significant over all odd detection lines at 5 %.

Source: Pintelon & Schoukens, *System Identification*, 2nd ed. 2012, ch. 4 (best linear approximation and its
variances).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.distortion import ODD, UNDIVIDED, DistortionLevels
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.second_order import SecondOrder

__all__ = ["NonlinearVariance", "nonlinear_variance"]

Floats = NDArray[np.float64]
SIGNIFICANT = 0.05
NEIGHBOURS = 2  # on either side
FREEDOM_OF_LINE = 1.0  # half that of Gaussian noise: neighbours share products of the same lines (simulated cubic rig)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NonlinearVariance:
    """`relative` (F,) is the distortion's complex variance over the squared linear answer at each line, read at the
    detection lines `at` (D,) Hz.
    """

    relative: Floats
    at: Floats

    @property
    def lines(self) -> int:
        """How many detection lines it rests on."""
        return len(self.at)

    def freedom_near(self, frequency: float) -> float:
        """Degrees of freedom of the level around `frequency`: of the detection lines within half an octave, and of at
        least as many as are averaged.
        """
        near = int(np.sum(np.abs(np.log2(self.at / frequency)) <= 0.5))
        return FREEDOM_OF_LINE * min(max(near, 2 * NEIGHBOURS + 1), self.lines)

    def added_to(self, measured: FrequencyResponse, freedom: float) -> tuple[FrequencyResponse, float]:
        """The response with noise and distortion in its variance, and the degrees of freedom of all lines together.

        `freedom` is that of the noise alone; those of sums follow from Welch and Satterthwaite (JCGM 100, G.4).
        """
        own = self.relative * measured.gain**2
        total = measured.variance + own
        share = own / total
        window = FREEDOM_OF_LINE * min(2 * NEIGHBOURS + 1, self.lines)
        each = 1 / ((1 - share) ** 2 / measured.degrees_of_freedom + share**2 / window)
        mean = float(np.mean(share))
        together = 1 / ((1 - mean) ** 2 / freedom + mean**2 / (FREEDOM_OF_LINE * self.lines))
        recorded = measured.noise / np.sqrt(measured.variance)  # angle per unit of response
        return replace(
            measured, variance=total, degrees_of_freedom=each, nonlinear=np.sqrt(own) * recorded
        ), together

    def covariance(self, measured: FrequencyResponse, model: SecondOrder, *, held: tuple[int, ...]) -> Floats:
        """Covariance (4, 4) that the distortion gives the parameters; `measured` has the noise alone in its variance,
        `held` are the numbers of parameters that were not fitted.
        """
        free = [number for number in range(4) if number not in held]
        scale = np.maximum(np.abs(model.vector[free]), 1e-9)
        slope = model.sensitivity(measured.frequency)[:, free] * scale
        weight = 2 / measured.variance
        own = self.relative * measured.gain**2 / 2

        def gathered(weights: Floats) -> Floats:
            return np.asarray(np.real(np.conj(slope).T @ (weights[:, None] * slope)))

        inverse = np.linalg.pinv(gathered(weight), hermitian=True)
        covariance = np.zeros((4, 4))
        covariance[np.ix_(free, free)] = inverse @ gathered(weight**2 * own) @ inverse * np.outer(scale, scale)
        return covariance


def nonlinear_variance(levels: DistortionLevels | None, measured: FrequencyResponse) -> NonlinearVariance | None:
    """The distortion at the lines of `measured`; None where no significant one is known."""
    from scipy.special import fdtrc

    if levels is None:
        return None
    seen = levels.keep((levels.parity == ODD) | (levels.parity == UNDIVIDED))
    count = len(seen.frequency)
    if count == 0:
        return None
    ratio = 1 + float(np.mean(seen.power / seen.noise**2))
    if fdtrc(2 * count, float(np.min(seen.noise_freedom)), ratio) > SIGNIFICANT:
        return None
    relative = seen.power / seen.linear**2
    mean = np.array([np.mean(relative[max(i - NEIGHBOURS, 0) : i + NEIGHBOURS + 1]) for i in range(count)])
    at_lines = np.interp(measured.frequency, seen.frequency, np.maximum(mean, 0.0))
    return NonlinearVariance(relative=at_lines, at=seen.frequency)
