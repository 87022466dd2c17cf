"""Which powers and phases together tell most under the peaks that the limits allow?

Powers that would tell most at a given crest factor may not allow that crest factor; so both are sought at once. What
is minimised does not change with the amplitude: the criterion of `excitation.information_criterion` plus what it gains
when the drive is scaled until the largest peak among the limited signals (voltage, slope, angle of every rig) meets
its limit. The peak is approached by the L_p norm of all signals together, p raised step by step. Every line keeps a
small share of the room, so that the whole curve is seen and the second order can be doubted.

Sources: P. Guillaume, J. Schoukens, R. Pintelon, I. Kollar, IEEE Trans. Instrumentation and Measurement 40 (1991)
982-989, doi:10.1109/19.119778 (the norm); G. C. Goodwin, R. L. Payne, Dynamic System Identification: Experiment Design
and Data Analysis (1977), chapter 6 (the criterion). That both are lowered together is our own.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from excitation.crest_factor import largest_peak, logarithmic_norm
from excitation.information_criterion import WEIGHT, LineInformation
from excitation.profile import Floats
from excitation.rig_model import Complexes

__all__ = ["PeakLimits", "lower_jointly"]

_LEAST_SHARE = 0.04  # of an equal share of the room, for every line
_POWERS = (4, 16, 64, 256, 1024)
_COARSE, _FINE = 6, 10  # points per period of the highest line: up to the third power, and for the last ones
_N_COARSE = 3
_ITERATIONS = 300  # with each power, at most
_WORK = 2e7  # points times iterations: a second or two, however many lines
_TOLERANCE = 1e-6
_MEMORY = 30  # steps that the descent remembers the curvature from


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PeakLimits:
    """Signals whose peaks are limited: (S, F) complex, the amplitude of each line driven with 1 V and phase 0, in
    units of the signal's limit; `harmonics` (F,) are the numbers of the lines."""

    signals: Complexes
    harmonics: NDArray[np.int64]


def lower_jointly(start: Complexes, *, limits: PeakLimits, information: LineInformation) -> Complexes:
    """Complex amplitudes of the lines (F,) in V with which the limits let through most information.

    Parameters
    ----------
    start : (F,) complex array
        Where the descent begins; only the ratios of the magnitudes count.

    Returns
    -------
    (F,) complex array
        Their largest peak among the signals is at its limit. Never worse than `start`, once every line has its share.
    """
    from scipy.optimize import minimize

    task = _Task(limits, information)
    best = current = task.variables_of(start)
    n_fine = task.n_samples(_FINE)
    best_value = task.value(best, n_fine)
    for index, power in enumerate(_POWERS):
        n_samples = task.n_samples(_COARSE if index < _N_COARSE else _FINE)
        work = n_samples * len(limits.signals) * len(_POWERS)
        options = {"maxiter": int(np.clip(_WORK / work, 5, _ITERATIONS)), "ftol": _TOLERANCE, "maxcor": _MEMORY}
        arguments = (power, n_samples)
        result = minimize(task.objective, current, args=arguments, jac=True, method="L-BFGS-B", options=options)
        current = np.asarray(result.x)
        value = task.value(current, n_fine)
        if value < best_value:
            best, best_value = current, value
    lines = task.lines_of(best)
    return np.asarray(lines / largest_peak(lines * limits.signals, limits.harmonics, n_fine))


class _Task:
    """The variables are the logarithms of the free shares of the lines, then their phases: (2 F,)."""

    def __init__(self, limits: PeakLimits, information: LineInformation) -> None:
        self._limits, self._information = limits, information
        self._n_lines = limits.harmonics.size
        # power with which a line alone would take an equal share of its most costly signal
        self._unit = 1 / (np.max(np.abs(limits.signals) ** 2, axis=0) * self._n_lines)

    def n_samples(self, oversampling: int) -> int:
        return 1 << math.ceil(math.log2(oversampling * int(self._limits.harmonics.max())))

    def variables_of(self, lines: Complexes) -> Floats:
        shares = np.abs(lines) ** 2 / self._unit
        free = shares / np.sum(shares) - _LEAST_SHARE / self._n_lines
        return np.concatenate([np.log(np.maximum(free, 1e-4 / self._n_lines)), np.angle(lines)])

    def lines_of(self, variables: Floats) -> Complexes:
        amplitude = np.sqrt(self._powers(self._free_shares(variables)))
        return np.asarray(amplitude * np.exp(1j * variables[self._n_lines :]))

    def value(self, variables: Floats, n_samples: int) -> float:
        """What is minimised, with the peak itself."""
        lines = self.lines_of(variables)
        peak = largest_peak(lines * self._limits.signals, self._limits.harmonics, n_samples)
        return self._information.criterion(np.abs(lines) ** 2) + 2 * WEIGHT * math.log(peak)

    def objective(self, variables: Floats, power: int, n_samples: int) -> tuple[float, Floats]:
        """What is minimised, with the norm for the peak, and its gradient."""
        free = self._free_shares(variables)
        powers = self._powers(free)
        lines = np.sqrt(powers) * np.exp(1j * variables[self._n_lines :])
        norm, by_line = logarithmic_norm(lines * self._limits.signals, power, self._limits.harmonics, n_samples)
        value, by_power = self._information.criterion_and_slope(powers)
        # by_line is the derivative to the logarithm of the complex amplitude: of the size, and minus that of the phase
        by_share = (by_power + WEIGHT * by_line.real / powers) * self._unit * (1 - _LEAST_SHARE)
        by_free = free * (by_share - free @ by_share)
        return value + 2 * WEIGHT * norm, np.concatenate([by_free, -2 * WEIGHT * by_line.imag])

    def _free_shares(self, variables: Floats) -> Floats:
        logarithm = variables[: self._n_lines]
        shares = np.exp(logarithm - np.max(logarithm))
        return np.asarray(shares / np.sum(shares))

    def _powers(self, free: Floats) -> Floats:
        return np.asarray(((1 - _LEAST_SHARE) * free + _LEAST_SHARE / self._n_lines) * self._unit)
