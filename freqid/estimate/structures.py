"""If a second-order model is not enough, what would do better? A few published structures, fitted to the measured
response.

    first order    K / (1 + j f / f1)
    extra pole     second order / (1 + j f / fp)           a driver's or a coil's lag
    zero           second order * (1 + j f / fz)           damping between other parts
    second mode    second order + K2 second-order mode     a flexible part

each with its own delay, by weighted least squares on the response with its measured variances. The one with the
smallest Bayesian information
criterion  chi-square + (number of parameters) ln(2 F)  is named, if it is smaller by more than 10 than that of the
second-order model
("very strong" evidence by Kass & Raftery) and the structure itself comes near the noise: a nonlinear rig is not talked
into a
second mode.

Source: G. Schwarz, Ann. Statist. 6 (1978) 461-464; R. Kass & A. Raftery, JASA 90 (1995) 773-795.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.frequency_response import FrequencyResponse
from freqid.second_order import SecondOrder

__all__ = ["BetterStructure", "find_better_structure"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
CLEARLY = 10.0
DESCRIBES = 2.0  # mean squared misfit in units of the noise: above it the structure only covers up something else


@dataclass(frozen=True, slots=True, kw_only=True)
class BetterStructure:
    """A structure that describes the response better: its name, the corner or mode it adds in Hz, and by how much its
    information criterion is smaller."""

    name: str
    frequency: float
    gained: float


@dataclass(frozen=True, slots=True)
class _Structure:
    name: str
    response: Callable[[Floats, Floats], Complexes]  # (vector, frequency) -> response
    starts: Callable[[SecondOrder, Floats], list[Floats]]
    adds: Callable[[Floats], float]


def find_better_structure(
    measured: FrequencyResponse, model: SecondOrder, *, use: NDArray[np.bool_] | None = None
) -> BetterStructure | None:
    """The best of the structures, or None where none is clearly better than the second-order model.

    `use` (F,) marks the points that are independent of each other.
    """
    keep = np.ones(len(measured.frequency), dtype=bool) if use is None else use
    f, target = measured.frequency[keep], measured.response[keep]
    weight = 1 / np.sqrt(measured.variance[keep] / 2)
    second = _fit(_SECOND, model, f, target, weight)
    if second is None:
        return None
    best: BetterStructure | None = None
    for structure in _STRUCTURES:
        found = _fit(structure, model, f, target, weight)
        if found is None:
            continue
        criterion, vector = found
        points = 2 * len(f)
        if criterion - len(vector) * np.log(points) > DESCRIBES * max(points - len(vector), 1):
            continue
        gained = second[0] - criterion
        if gained > CLEARLY and (best is None or gained > best.gained):
            best = BetterStructure(name=structure.name, frequency=structure.adds(vector), gained=gained)
    return best


def _fit(
    structure: _Structure, model: SecondOrder, f: Floats, target: Complexes, weight: Floats
) -> tuple[float, Floats] | None:
    """Smallest information criterion over the starts, and the vector that reaches it."""
    from scipy.optimize import least_squares

    def residual(vector: Floats) -> Floats:
        # a wild trial point may overflow; it is then only a bad one
        with np.errstate(all="ignore"):
            left = (structure.response(vector, f) - target) * weight
        return np.asarray(np.nan_to_num(np.concatenate([left.real, left.imag]), nan=1e12, posinf=1e12, neginf=-1e12))

    best: tuple[float, Floats] | None = None
    for start in structure.starts(model, f):
        if len(start) >= 2 * len(f):
            return None
        found = least_squares(residual, start, x_scale=np.maximum(np.abs(start), 1e-3), max_nfev=200)
        criterion = float(2 * found.cost + len(start) * np.log(2 * len(f)))
        if best is None or criterion < best[0]:
            best = criterion, found.x
    return best


def _second_order(v: Floats, f: Floats) -> Complexes:
    """Gain, ln fn, ln zeta, delay."""
    x = f / np.exp(v[1])
    return np.asarray(v[0] * np.exp(-2j * np.pi * f * v[3]) / (1 - x**2 + 2j * np.exp(v[2]) * x))


def _as_vector(m: SecondOrder) -> Floats:
    return np.array([m.gain, np.log(m.natural_frequency), np.log(m.damping_ratio), m.delay])


def _corners(model: SecondOrder, f: Floats) -> Floats:
    return np.array([model.natural_frequency * 3, f[-1], 2 * f[-1]])


_SECOND = _Structure("second order", _second_order, lambda m, f: [_as_vector(m)], lambda v: float(np.exp(v[1])))
_STRUCTURES = (
    _Structure(
        "first order",
        lambda v, f: v[0] * np.exp(-2j * np.pi * f * v[2]) / (1 + 1j * f / np.exp(v[1])),
        lambda m, f: [np.array([m.gain, np.log(m.natural_frequency / (2 * m.damping_ratio)), m.delay])],
        lambda v: float(np.exp(v[1])),
    ),
    _Structure(
        "extra pole",
        lambda v, f: _second_order(v, f) / (1 + 1j * f / np.exp(v[4])),
        lambda m, f: [np.append(_as_vector(m), np.log(c)) for c in _corners(m, f)],
        lambda v: float(np.exp(v[4])),
    ),
    _Structure(
        "zero",
        lambda v, f: _second_order(v, f) * (1 + 1j * f / np.exp(v[4])),
        lambda m, f: [np.append(_as_vector(m), np.log(c)) for c in _corners(m, f)],
        lambda v: float(np.exp(v[4])),
    ),
    _Structure(
        "second mode",
        lambda v, f: (
            _second_order(v, f)
            + v[4]
            * np.exp(-2j * np.pi * f * v[3])
            / (1 - (f / np.exp(v[5])) ** 2 + 2j * np.exp(v[6]) * f / np.exp(v[5]))
        ),
        lambda m, f: [
            np.concatenate([_as_vector(m), [s * 0.05 * m.gain, np.log(c), np.log(0.05)]])
            for c in np.geomspace(1.5 * m.natural_frequency, max(f[-1], 1.6 * m.natural_frequency), 4)
            for s in (1, -1)
        ],
        lambda v: float(np.exp(v[5])),
    ),
)
