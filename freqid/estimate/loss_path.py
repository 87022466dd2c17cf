"""Given how well each frame fits each number of frames lost before it: where were they lost, and how sure is that?

The number lost before frame i never falls. With the log-likelihoods ell[m, i] of frame i after m losses, and
cum[m, k] their sum over the frames before boundary k (boundary k lies before frame k),

    best[m, k] = cum[m, k] + max over j <= k of (best[m-1, j] - price - cum[m, j])

is the best account with m losses up to boundary k (dynamic programming; each loss costs `price`). The same recursion
with sums instead of maxima, forwards and backwards, gives the probability of each boundary for each loss, all others
being free: where the angle stands still, a loss may lie anywhere in the rest, and its interval says so.

Source: R. Bellman & R. Dreyfus 1962 (segmentation by dynamic programming); L. Rabiner, Proc. IEEE 77 (1989) 257-286
(forward-backward recursion; left-to-right model).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["LossPath", "best_account", "place_losses"]

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LossPath:
    """Boundaries (L,) of the losses, rising (the median of each one's probability), and the boundaries (L, 2) between
    which each lies with 95 % probability.
    """

    boundary: Indices
    interval: Indices

    @property
    def count(self) -> int:
        """How many frames were lost."""
        return len(self.boundary)


def best_account(likelihood: Floats, *, price: float) -> tuple[int, float]:
    """The most likely number of losses and what it gains over none, for log-likelihoods (M + 1, N)."""
    total = _running(likelihood)
    best = total[0]
    ends = [float(best[-1])]
    for m in range(1, len(total)):
        best = total[m] + np.maximum.accumulate(_interior(best) - price - total[m])
        ends.append(float(best[-1]))
    count = int(np.argmax(ends))
    return count, ends[count] - ends[0]


def place_losses(likelihood: Floats, count: int) -> LossPath:
    """Where `count` losses lie, for log-likelihoods (at least count + 1, N); every boundary is as likely beforehand."""
    total = _running(likelihood[: count + 1])
    forward = [total[0]]
    for m in range(1, count + 1):
        forward.append(total[m] + np.logaddexp.accumulate(_interior(forward[-1]) - total[m]))
    backward = total[count, -1] - total[count]
    places, intervals = [], []
    for m in range(count, 0, -1):
        weight = _interior(forward[m - 1]) + backward
        share = np.cumsum(np.exp(weight - np.max(weight)))
        low, middle, high = np.searchsorted(share, np.array([0.025, 0.5, 0.975]) * share[-1])
        places.append(int(middle))
        intervals.append((int(low), int(high)))
        inner = _interior(total[m - 1] + backward)
        backward = np.logaddexp.accumulate(inner[::-1])[::-1] - total[m - 1]
    return LossPath(
        boundary=np.maximum.accumulate(np.array(places[::-1], dtype=np.intp)),
        interval=np.array(intervals[::-1], dtype=np.intp).reshape(count, 2),
    )


def _running(likelihood: Floats) -> Floats:
    """Sums (M + 1, N + 1) over the frames before each boundary."""
    total = np.zeros((likelihood.shape[0], likelihood.shape[1] + 1))
    np.cumsum(likelihood, axis=1, out=total[:, 1:])
    return total


def _interior(values: Floats) -> Floats:
    """Nothing is lost before the first frame or after the last."""
    inside = values.copy()
    inside[[0, -1]] = -np.inf
    return inside
