"""What is a distribution of power over lines worth, and which line would tell more?

The information of a periodic drive about (gain, natural frequency, damping ratio, delay) is a sum over its lines,
each in proportion to its power. Judged is the logarithm of the variance of the damping ratio, with a smaller part of
that of the natural frequency, averaged over the rigs that the true one may be; less is better. Ten times the power
lowers it by `WEIGHT` ln 10.

Source: G. C. Goodwin, R. L. Payne, Dynamic System Identification: Experiment Design and Data Analysis (1977),
chapter 6.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from excitation.profile import Floats
from excitation.rig_model import RigModel

__all__ = ["WEIGHT", "LineInformation"]

_CRITERION = np.array([0.0, 0.2, 1.0, 0.0])  # weights of the logarithms of the variances
WEIGHT = float(_CRITERION.sum())
_LIKELIEST = 0.5  # weight of the first rig; the others share the rest


class LineInformation:
    """What each line tells of each rig: the likeliest first, which weighs as much as all others together."""

    def __init__(self, lines: Floats, rigs: Sequence[RigModel]) -> None:
        self._dependences = np.array([_dependences(rig, lines) for rig in rigs])  # (R, 2 F, 4)
        others = len(rigs) - 1
        self._weights = np.ones(1) if others == 0 else np.array([_LIKELIEST, *[(1 - _LIKELIEST) / others] * others])

    def criterion(self, power: Floats) -> float:
        """The weighted mean of logarithms of variances for the powers (F,), but for a constant."""
        variances = np.einsum("rii->ri", self._covariances(power))
        return float(self._weights @ np.log(variances) @ _CRITERION)

    def criterion_and_slope(self, power: Floats) -> tuple[float, Floats]:
        """The criterion and its derivative to each power (F,)."""
        covariances = self._covariances(power)
        variances = np.einsum("rii->ri", covariances)
        share = self._weights[:, np.newaxis] * _CRITERION / variances
        inner = (covariances * share[:, np.newaxis, :]) @ covariances
        told = np.sum((self._dependences @ inner) * self._dependences, axis=(0, 2))
        value = float(self._weights @ np.log(variances) @ _CRITERION)
        return value, -np.sum(told.reshape(2, -1), axis=0)

    def _covariances(self, power: Floats) -> NDArray[np.float64]:
        weighted = self._dependences * np.tile(power, 2)[:, np.newaxis]
        return np.asarray(np.linalg.inv(np.swapaxes(self._dependences, 1, 2) @ weighted))


def _dependences(rig: RigModel, lines: Floats) -> Floats:
    """Real, then imaginary parts of the response's dependence on the parameters, each in its own units, (2 F, 4)."""
    sensitivity = np.asarray(rig.sensitivity(lines), dtype=np.complex128)
    sensitivity = sensitivity / np.sqrt(np.sum(np.abs(sensitivity) ** 2, axis=0))
    return np.concatenate([sensitivity.real, sensitivity.imag])
