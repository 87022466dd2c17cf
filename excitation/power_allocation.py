"""How much of the drive does each line get, so that little time tells much of the damping?

What a drive tells is judged by `excitation.information_criterion`; what it costs is its mean square in each limited
signal (the voltage, its slope, the angle of each rig), in units of that signal's limit: with phases that bring all of
them to one crest factor, the largest of these costs sets the amplitude. The powers follow the multiplicative
algorithm: each line times the root of what it contributes over what it costs, at once with the weights of the costs
(largest on the limit that binds). A part of the power stays flat, so that every line shows the curve and the second
order can be doubted. The phases are not looked at here: `excitation.joint_descent` starts from these powers.

Sources: V. V. Fedorov, Theory of Optimal Experiments (1972), chapter 2; D. M. Titterington, "Algorithms for computing
D-optimal designs on a finite design space", Proc. Conf. Information Sciences and Systems (1976) 213-216; R. Pintelon,
J. Schoukens, System Identification: A Frequency Domain Approach (2nd ed., 2012), chapter 5.
"""

from __future__ import annotations

import numpy as np

from excitation.information_criterion import LineInformation
from excitation.profile import Floats

__all__ = ["informative_amplitudes"]

_COST_STEP = 0.3  # exponent of the weights of the costs: small enough not to oscillate
_LEAST_PRICE = 0.2  # of an equal share: power that tells little is not spent because no limit forbids it
_FLAT_PART = 0.06  # of the power


def informative_amplitudes(information: LineInformation, *, costs: Floats, rounds: int) -> Floats:
    """Amplitudes of the lines (F,) that tell most of damping ratio and natural frequency.

    Parameters
    ----------
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
    flat = _to_limit(np.ones(costs.shape[1]), costs)
    power, prices = flat, np.full(len(costs), 1 / len(costs))
    for _ in range(rounds):
        benefit = -information.criterion_and_slope(power)[1]
        price = prices @ costs
        power = power * np.sqrt(benefit / price)
        spent = costs @ power
        prices = prices * (spent / np.max(spent)) ** _COST_STEP
        prices = np.maximum(prices / np.sum(prices), _LEAST_PRICE / len(costs))
        power = power / np.max(spent)
    return np.asarray(np.sqrt((1 - _FLAT_PART) * _to_limit(power, costs) + _FLAT_PART * flat))


def _to_limit(power: Floats, costs: Floats) -> Floats:
    return np.asarray(power / np.max(costs @ power))
