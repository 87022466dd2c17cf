"""What do several runs say together? The generalised mean of their parameters, and whether they agree.

Every run is estimated alone; the parameter vectors are averaged with the inverse of their covariances. Where
they scatter more than their uncertainties allow (chi-square at 5 %), the covariance is enlarged by that ratio and a
caveat says so.
On separate clocks each run has its own offset: then the delay is not averaged and stays that of the last run.
Source: JCGM 102:2011, and the Birge ratio (R. T. Birge, Phys. Rev. 40 (1932) 207) for the enlargement.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from freqid.errors import EstimationError
from freqid.estimate.identification import Identification
from freqid.quantity import Caveat
from freqid.second_order import SecondOrder

__all__ = ["combine"]


def combine(found: Sequence[Identification]) -> Identification:
    """One identification from several runs of one rig; the response shown is that of the last run.

    Raises EstimationError where the runs are in different angle units, or there is none.
    """
    if not found:
        raise EstimationError("no complete run to combine")
    last = found[-1]
    if len(found) == 1:
        return last
    if len({one.model.angle_unit for one in found}) > 1:
        raise EstimationError("the runs are in different angle units: import them with the same rig sheet")
    common = all(one.model.clock.offset_known and not one.model.undetermined for one in found)
    kept = [0, 1, 2, 3] if common else [0, 1, 2]
    values = np.array([one.model.model.vector[kept] for one in found])
    weights = [np.linalg.inv(one.model.covariance[np.ix_(kept, kept)]) for one in found]
    covariance = np.linalg.inv(np.sum(weights, axis=0))
    mean = covariance @ np.sum([w @ v for w, v in zip(weights, values, strict=True)], axis=0)
    ratio, caveat = _scatter(values - mean, weights)
    vector, joint = last.model.model.vector, last.model.covariance.copy()
    vector[kept] = mean
    joint[:3, 3] = joint[3, :3] = 0.0
    joint[np.ix_(kept, kept)] = covariance * ratio
    model = replace(
        last.model,
        model=SecondOrder.from_vector(vector),
        covariance=joint,
        degrees_of_freedom=float(sum(one.model.degrees_of_freedom for one in found)),
        runs=tuple(name for one in found for name in one.model.runs),
        caveats=(*last.model.caveats, *caveat),
    )
    return replace(last, model=model)


def _scatter(deviation: np.ndarray, weights: list[np.ndarray]) -> tuple[float, list[Caveat]]:
    from scipy.stats import chi2

    statistic = float(sum(d @ w @ d for d, w in zip(deviation, weights, strict=True)))
    degrees = deviation.size - deviation.shape[1]
    if chi2.sf(statistic, degrees) >= 0.05:
        return 1.0, []
    ratio = statistic / degrees
    return ratio, [
        Caveat(
            "runs_differ",
            f"The runs scatter {np.sqrt(ratio):.2g} times more than their uncertainties allow; the intervals were "
            f"widened by "
            "that factor. Something changes from run to run: amplitude, temperature, operating point.",
        )
    ]
