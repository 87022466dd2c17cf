"""How much of the drive does each line get, so that little time tells much of the damping?

The information of a periodic drive is a sum over its lines, each in proportion to its power; what the drive costs is
its mean square in each limited signal (the voltage, its slope, the angle of each rig), in units of that signal's
limit: with phases that bring all of them to one crest factor, the largest of these costs sets the amplitude.
Minimised is the logarithm of the variance of the damping ratio, with a smaller part of that of the natural frequency,
averaged over the rigs that the true one may be. The powers follow the multiplicative algorithm: each line times the
root of what it contributes over what it costs, at once with the weights of the costs (largest on the limit that
binds). A part of the power stays flat, so that every line shows the curve and the second order can be doubted.

Sources: V. V. Fedorov, Theory of Optimal Experiments (1972), chapter 2; D. M. Titterington, "Algorithms for computing
D-optimal designs on a finite design space", Proc. Conf. Information Sciences and Systems (1976) 213-216; G. C.
Goodwin, R. L. Payne, Dynamic System Identification (1977), chapter 6; R. Pintelon, J. Schoukens, System
Identification: A Frequency Domain Approach (2nd ed., 2012), chapter 5.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from excitation.profile import Floats
from excitation.rig_model import Complexes, RigModel

__all__ = ["informative_amplitudes", "logarithmic_variance"]

_CRITERION = np.array([0.0, 0.2, 1.0, 0.0])  # weights of the logarithms of the variances
_COST_STEP = 0.3  # exponent of the weights of the costs: small enough not to oscillate
_LEAST_PRICE = 0.2  # of an equal share: power that tells little is not spent because no limit forbids it
_LIKELIEST = 0.5  # weight of the first rig; the others share the rest
_FLAT_PART = 0.06  # of the power


def informative_amplitudes(lines: Floats, rigs: Sequence[RigModel], *, costs: Floats, rounds: int) -> Floats:
    """Amplitudes of the lines (F,) in Hz that tell most of damping ratio and natural frequency.

    Parameters
    ----------
    rigs : sequence of RigModel
        All that the true rig may be, the likeliest first.
    costs : (S, F) array
        Square of the amplitude of each line, driven with 1 V, in each limited signal, in units of that signal's limit.
    rounds : int
        Of the algorithm, from a flat spectrum. The optimum itself, after hundreds, stands on so few lines that no
        phases can lower their peak: stopped early, the powers are smoother and the drive is larger.

    Returns
    -------
    (F,) array
        V; in the most costly signal, the sum of their squares is 1 in units of the limit.
    """
    information = np.array([_information(rig, lines) for rig in rigs])
    weights = _weights(len(rigs))
    flat = _to_limit(np.ones(lines.size), costs)
    power, prices = flat, np.full(len(costs), 1 / len(costs))
    for _ in range(rounds):
        benefit = _benefit(power, information, weights)
        price = prices @ costs
        power = power * np.sqrt(benefit / price)
        spent = costs @ power
        prices = prices * (spent / np.max(spent)) ** _COST_STEP
        prices = np.maximum(prices / np.sum(prices), _LEAST_PRICE / len(costs))
        power = power / np.max(spent)
    return np.asarray(np.sqrt((1 - _FLAT_PART) * _to_limit(power, costs) + _FLAT_PART * flat))


def logarithmic_variance(amplitudes: Floats, lines: Floats, rigs: Sequence[RigModel]) -> float:
    """What is minimised, but for a constant, for the amplitudes (F,): weighted mean of logarithms of variances."""
    information = np.array([_information(rig, lines) for rig in rigs])
    covariance = np.linalg.inv(np.einsum("f,rfij->rij", amplitudes**2, information))
    return float(_weights(len(rigs)) @ np.log(np.einsum("rii->ri", covariance)) @ _CRITERION)


def _to_limit(power: Floats, costs: Floats) -> Floats:
    return np.asarray(power / np.max(costs @ power))


def _weights(n_rigs: int) -> Floats:
    if n_rigs == 1:
        return np.ones(1)
    return np.concatenate([[_LIKELIEST], np.full(n_rigs - 1, (1 - _LIKELIEST) / (n_rigs - 1))])


def _information(rig: RigModel, lines: Floats) -> Floats:
    """Information of unit power on each line about the four parameters, each in its own units, (F, 4, 4)."""
    sensitivity: Complexes = np.asarray(rig.sensitivity(lines), dtype=np.complex128)
    sensitivity = sensitivity / np.sqrt(np.sum(np.abs(sensitivity) ** 2, axis=0))
    return np.asarray(np.real(sensitivity[:, :, np.newaxis] * np.conj(sensitivity[:, np.newaxis, :])))


def _benefit(power: Floats, information: Floats, weights: Floats) -> Floats:
    """By how much each line's power lowers the criterion, (F,): its slope with the sign turned."""
    covariance = np.linalg.inv(np.einsum("f,rfij->rij", power, information))
    variances = np.einsum("rii->ri", covariance)
    contribution = np.einsum("rij,rfjk,rki->rfi", covariance, information, covariance, optimize=True)
    return np.asarray(np.einsum("r,i,rfi,ri->f", weights, _CRITERION, contribution, 1 / variances, optimize=True))
