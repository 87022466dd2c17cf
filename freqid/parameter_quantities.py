"""What are the four fitted parameters worth? Each with its unit and interval, the same for every test that fits
them.
"""

from __future__ import annotations

from collections.abc import Collection

import numpy as np
from numpy.typing import NDArray

from freqid.quantity import Quantity
from freqid.second_order import PARAMETER_ORDER, SecondOrder, parameter_units

__all__ = ["quantities_of"]


def quantities_of(
    model: SecondOrder,
    covariance: NDArray[np.float64],
    *,
    degrees_of_freedom: float,
    angle_unit: str,
    undetermined: Collection[str] = (),
) -> dict[str, Quantity | None]:
    """The parameters by name, with the square roots of the covariance's (4, 4) diagonal; None for those
    undetermined.
    """
    units = parameter_units(angle_unit)
    deviations = np.sqrt(np.diag(covariance))
    return {
        name: None
        if name in undetermined
        else Quantity.normal(value, units[name], float(u), degrees_of_freedom)
        for name, value, u in zip(PARAMETER_ORDER, model.vector, deviations, strict=True)
    }
