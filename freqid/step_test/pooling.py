"""What do several readings of one quantity say together? Their weighted mean, as uncertain as their scatter.

Source: JCGM 100:2008, 4.2.3 (scatter); the internal and external uncertainty of a weighted mean as in any text.
"""

from __future__ import annotations

import numpy as np

from freqid.quantity import Quantity, coverage_factor

__all__ = ["pool"]


def pool(values: list[Quantity]) -> Quantity | None:
    """Weighted mean of several readings of one quantity; None of none.

    The standard uncertainty is the larger of the internal (weights) and the external one (scatter, JCGM 100 4.2.3).
    """
    if not values:
        return None
    value = np.array([q.value for q in values])
    u = np.array([max(q.standard_uncertainty, 1e-300) for q in values])
    weight = u**-2.0
    mean = float(np.sum(weight * value) / np.sum(weight))
    internal = float(1 / np.sqrt(np.sum(weight)))
    n = len(values)
    if n == 1:
        return Quantity.normal(mean, values[0].unit, internal)
    external = float(np.sqrt(np.sum(weight * (value - mean) ** 2) / np.sum(weight) / (n - 1)))
    if external <= internal:
        return Quantity.normal(mean, values[0].unit, internal)
    half = max(coverage_factor(n - 1) * external, coverage_factor() * internal)
    return Quantity(
        value=mean, unit=values[0].unit, standard_uncertainty=external, interval_95=(mean - half, mean + half)
    )
