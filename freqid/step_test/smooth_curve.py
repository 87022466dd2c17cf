"""What does the angle do between noisy frames? A local quadratic through the frames around each instant.

A least-squares parabola over ± 0.15 of the oscillation's period is read at its centre: for a sine its height is low by
0.28 % of the oscillation's amplitude at a peak ((3/35) a^4 / 24 with a = 0.3 pi), and white noise of variance s^2 is
reduced to about 2.25 s^2 / n.
Frames before the onset take no part, so the kink there is not rounded off; the onset itself is one further point.

Source: W. S. Cleveland, JASA 74 (1979) 829-836 (local regression); A. Savitzky & M. Golay 1964.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["HALF_WIDTH_IN_PERIODS", "SmoothCurve"]

Floats = NDArray[np.float64]
HALF_WIDTH_IN_PERIODS = 0.15
FEWEST_FRAMES = 4


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SmoothCurve:
    """Frames of one step: `time` (N,) s from the onset, `angle` (N,), half width of the window in s, noise rms of a
    frame.
    """

    time: Floats
    angle: Floats
    half_width: float
    noise: float

    def at(self, instants: Floats) -> tuple[Floats, Floats, Floats]:
        """Angle, its slope, and the standard uncertainty of the angle at `instants` (Q,); NaN where frames are
        missing.
        """
        value, slope, spread = (np.full(len(instants), np.nan) for _ in range(3))
        low = np.searchsorted(self.time, instants - self.half_width)
        high = np.searchsorted(self.time, instants + self.half_width)
        for i, (a, b, t) in enumerate(zip(low, high, instants, strict=True)):
            if b - a < FEWEST_FRAMES:
                continue
            x = (self.time[a:b] - t) / self.half_width
            design = np.stack([np.ones_like(x), x, x**2], axis=1)
            gram = np.linalg.inv(design.T @ design)
            coefficient = gram @ (design.T @ self.angle[a:b])
            value[i], slope[i] = coefficient[0], coefficient[1] / self.half_width
            spread[i] = self.noise * np.sqrt(gram[0, 0])
        return value, slope, spread
