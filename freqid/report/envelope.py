"""How can a hundred thousand points be shown by a thousand? By the smallest and the largest of each stretch.

What is drawn then covers the same pixels as all points would: no peak is lost, only repetition.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["thinned"]

Floats = NDArray[np.float64]


def thinned(x: Floats, y: Floats, *, points: int = 1200) -> tuple[Floats, Floats]:
    """At most about `points` of the points (N,), finite ones only: both extremes of every stretch, in their own order.

    `x` is in any order that is to be kept; extremes keep their own `x`. Few points come back unchanged.
    """
    known = np.isfinite(x) & np.isfinite(y)
    x, y = x[known], y[known]
    if len(x) <= points:
        return x, y
    stretches = np.array_split(np.arange(len(x)), max(points // 2, 1))
    kept = np.unique([[part[np.argmin(y[part])], part[np.argmax(y[part])]] for part in stretches])
    return x[kept], y[kept]
