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
MOST_FRAMES_AT_ONCE = 200_000  # in all windows that are worked out together


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
        enough = np.flatnonzero(high - low >= FEWEST_FRAMES)
        at_once = max(1, MOST_FRAMES_AT_ONCE // max(int(np.max(high - low, initial=1)), 1))
        for begin in range(0, len(enough), at_once):
            chosen = enough[begin : begin + at_once]
            value[chosen], slope[chosen], spread[chosen] = self._parabolas(instants[chosen], low[chosen], high[chosen])
        return value, slope, spread

    def _parabolas(
        self, instants: Floats, low: NDArray[np.intp], high: NDArray[np.intp]
    ) -> tuple[Floats, Floats, Floats]:
        """Height, slope and standard uncertainty of the height of one parabola per instant, frames low to high - 1."""
        width = int(np.max(high - low))
        frames = low[:, None] + np.arange(width)
        inside = frames < high[:, None]
        frames = np.minimum(frames, len(self.time) - 1)
        x = np.where(inside, (self.time[frames] - instants[:, None]) / self.half_width, 0.0)
        design = np.stack([inside.astype(float), x, x**2], axis=-1)
        # pseudo-inverse: frames with equal stamps leave a parabola undetermined
        gram = np.linalg.pinv(np.einsum("qfi,qfj->qij", design, design), hermitian=True)
        right = np.einsum("qfi,qf->qi", design, np.where(inside, self.angle[frames], 0.0))
        coefficient = np.einsum("qij,qj->qi", gram, right)
        return coefficient[:, 0], coefficient[:, 1] / self.half_width, self.noise * np.sqrt(gram[:, 0, 0])
