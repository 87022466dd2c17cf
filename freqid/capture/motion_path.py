"""Where is the rig at any instant, when its motion is known at knots? A cubic (Hermite) between angle and rate at each.

For a smooth motion of angular frequency w it misses by (w h)^4 / 384 of the swing, h the distance of the knots.
Source: C. de Boor, *A Practical Guide to Splines*, 1978, ch. IV.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.quantity import in_unit

__all__ = ["MotionPath"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MotionPath:
    """Angle and rate at knots (N,), cubic in between; at an impact two knots share an instant.

    Before the first knot the rig stands at its first angle, after the last at its last.
    """

    time: Floats = in_unit("s")
    angle: Floats = in_unit("angle_unit")
    rate: Floats = in_unit("angle_unit/s")

    def at(self, time: Floats) -> Floats:
        """Angle at each instant (Q,)."""
        i, share, width = self._locate(time)
        x0, x1, d0, d1 = self._ends(i, width)
        a, b = 3 * (x1 - x0) - 2 * d0 - d1, 2 * (x0 - x1) + d0 + d1
        return np.asarray(x0 + share * (d0 + share * (a + share * b)))

    def mean(self, end: Floats, exposure: float) -> Floats:
        """Mean angle over [end - exposure, end], (Q,); the angle itself for exposure 0."""
        if exposure <= 0:
            return self.at(end)
        return (self._integral(end) - self._integral(end - exposure)) / exposure

    def _integral(self, time: Floats) -> Floats:
        h = np.diff(self.time)
        x, v = self.angle, self.rate
        whole = h / 2 * (x[:-1] + x[1:]) + h**2 / 12 * (v[:-1] - v[1:])
        upto = np.concatenate([[0.0], np.cumsum(whole)])
        i, share, width = self._locate(time)
        x0, x1, d0, d1 = self._ends(i, width)
        a, b = 3 * (x1 - x0) - 2 * d0 - d1, 2 * (x0 - x1) + d0 + d1
        part = width * share * (x0 + share * (d0 / 2 + share * (a / 3 + share * b / 4)))
        outside = np.minimum(time - self.time[0], 0.0) * x[0] + np.maximum(time - self.time[-1], 0.0) * x[-1]
        return np.asarray(upto[i] + part + outside)

    def _locate(self, time: Floats) -> tuple[NDArray[np.intp], Floats, Floats]:
        inside = np.clip(time, self.time[0], self.time[-1])
        i = np.clip(np.searchsorted(self.time, inside, side="right") - 1, 0, len(self.time) - 2)
        width = self.time[i + 1] - self.time[i]
        return i, (inside - self.time[i]) / np.where(width > 0, width, 1.0), width

    def _ends(self, i: NDArray[np.intp], width: Floats) -> tuple[Floats, Floats, Floats, Floats]:
        return self.angle[i], self.angle[i + 1], self.rate[i] * width, self.rate[i + 1] * width
