"""Were frames lost without a gap in the stamps? Then everything after the loss comes one frame too early.

A loss before frame k shifts the true time of all later frames by one frame interval, which changes the angle by

    c_k(i) = K rate(i) * ratio * interval   for i >= k,  0 before

Each k is tried at once (cumulative sums), all fitted parameters, the clock ratio among them, projected out. The best
one is
accepted where it improves the fit beyond what chance gives over all k, and by a whole number of frames; the stamps
after it are moved, the fit is repeated, and the search goes on. Sudden steps only: a clock's drift is the ratio's.

Source: generalised likelihood ratio for a jump at an unknown instant (M. Basseville & I. Nikiforov, *Detection of
Abrupt Changes*, 1993, ch. 2).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.frame_grid import FrameGrid
from freqid.estimate.noise_spectrum import noise_spectrum
from freqid.estimate.outliers import spikes
from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit, refine

__all__ = ["with_silent_losses"]

Floats = NDArray[np.float64]

# chi-square with one degree of freedom: 30 has probability 4e-8; over 36000 frames still 1.5e-3
CLEAR = 30.0
WHOLE_WITHIN = 0.4  # frames
MOST_LOSSES = 12
PASSES = 6
SPIKE = 5.0  # robust standard deviations


def with_silent_losses(record: Record, fit: RecordFit) -> tuple[Record, RecordFit, Floats]:
    """The record with corrected stamps, its fit, and the corrected stamps of the first frame after each loss (L,).

    A stamp that appears twice stands for two frames lost there.
    """
    # among several losses the clock ratio takes up most of each: the first finds look like less than a frame
    found: list[int] = []
    moved, again = record, fit
    while len(found) < MOST_LOSSES:
        jump = _best_jump(moved, again, least=0.2)
        if jump is None:
            break
        found = sorted([*found, jump])
        moved, again = _corrected(record, again, found)
    if not found:
        return record, fit, np.empty(0)
    found, moved, again = _settled(record, again, found)
    found, moved, again = _verified(record, moved, again, found)
    if not found or again.sum_of_squares >= fit.sum_of_squares:
        return record, fit, np.empty(0)
    return moved, again, moved.stamp[found]


def _corrected(record: Record, fit: RecordFit, found: list[int]) -> tuple[Record, RecordFit]:
    shift = np.zeros(len(record.stamp))
    for k in found:
        shift[k:] += record.frame_interval
    moved = record.with_stamps(record.stamp + shift)
    return moved, refine(moved, fit.parameters) or fit


def _settled(record: Record, fit: RecordFit, found: list[int]) -> tuple[list[int], Record, RecordFit]:
    """Take each loss out and look again with all others in place, until nothing moves: early finds stood among unfound
    ones.
    """
    moved, again = _corrected(record, fit, found)
    for _ in range(PASSES):
        before = list(found)
        for k in before:
            others = list(found)
            others.remove(k)
            moved, again = _corrected(record, again, others)
            better = _best_jump(moved, again, least=1 - WHOLE_WITHIN)
            found = others if better is None else sorted([*others, better])
        moved, again = _corrected(record, again, found)
        further = _best_jump(moved, again, least=1 - WHOLE_WITHIN)
        if further is not None and len(found) < MOST_LOSSES:
            found = sorted([*found, further])
            moved, again = _corrected(record, again, found)
        if found == before:
            break
    return found, moved, again


def _verified(
    record: Record, moved: Record, fit: RecordFit, found: list[int]
) -> tuple[list[int], Record, RecordFit]:
    """Keep a loss only where it gains more than the loudest part of the noise could: slow noise looks like wandering
    time.
    """
    grid = FrameGrid.from_stamps(moved.stamp)
    try:
        noise = noise_spectrum(fit.residual, grid, fitted=fit.prediction.jacobian)
    except ValueError:
        return [], record, fit
    loudest = float(np.max(noise.level[grid.frequency > 0]))
    kept = []
    for k in found:
        others = list(found)
        others.remove(k)
        without = _corrected(record, fit, others)[1]
        if without.sum_of_squares - fit.sum_of_squares >= CLEAR * loudest:
            kept.append(k)
    if kept == found:
        return found, moved, fit
    return kept, *_corrected(record, fit, kept)


def _best_jump(record: Record, fit: RecordFit, *, least: float) -> int | None:
    """Number of the first frame after the clearest loss that amounts to at least `least` frames, or None."""
    jacobian = fit.prediction.jacobian
    free = fit.prediction.free
    if 3 not in free:
        return None
    # the derivative by the lag is -K rate
    later = -jacobian[:, free.index(3)] * fit.parameters.clock_ratio * record.frame_interval
    basis, _ = np.linalg.qr(jacobian / np.maximum(np.linalg.norm(jacobian, axis=0), 1e-300))
    # a single mis-tracked frame must not look like a loss
    residual = np.where(spikes(fit.residual, farthest=SPIKE), 0.0, fit.residual)
    residual = residual - basis @ (basis.T @ residual)

    def from_here_on(values: Floats) -> Floats:
        return np.asarray(np.cumsum(values[::-1], axis=0)[::-1])

    projected = from_here_on(basis * later[:, None])
    size = from_here_on(later**2) - np.sum(projected**2, axis=1)
    match = from_here_on(later * residual)
    usable = size > 1e-6 * float(np.max(size))
    amount = np.where(usable, match / np.where(usable, size, 1.0), 0.0)
    gained = np.where(usable & (amount > least), match * amount, 0.0)
    k = int(np.argmax(gained))
    rest = (float(residual @ residual) - gained[k]) / max(len(residual) - basis.shape[1] - 1, 1)
    return k if k > 0 and gained[k] >= CLEAR * rest else None
