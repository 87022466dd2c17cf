"""How loud is the noise, frequency by frequency? A smoothed periodogram of the residual on the frame grid.

Frames keep their slot number; lost ones are empty. `level` is the noise variance that white noise of the same loudness would
have, so white noise of variance s^2 has the level s^2 everywhere. Bins at the harmonics of a periodic excitation are left
out: they hold the signal's own misfit. Between whole periods the remaining bins carry the same information
as the scatter from period to period (Parseval).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.frame_grid import FrameGrid

__all__ = ["NoiseSpectrum", "noise_spectrum"]

Floats = NDArray[np.float64]

FEWEST_BINS = 20
MOST_BINS = 60  # of a smoothing window: 120 degrees of freedom, yet narrow enough for coloured noise
LARGEST_SHARE = 8  # a smoothing window holds at most an eighth of the bins


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NoiseSpectrum:
    """Noise level (B,) in angle unit squared at `frequency` (B,) Hz, and the degrees of freedom of each level."""

    frequency: Floats
    level: Floats
    degrees_of_freedom: Floats
    usable: NDArray[np.bool_]

    def freedom_between(self, low: float, high: float) -> float:
        """Real degrees of freedom of all used bins that levels between two frequencies rest on."""
        half = self.degrees_of_freedom[0] / 4 * self.frequency[1]
        within = (self.frequency >= low - half) & (self.frequency <= high + half)
        return 2.0 * max(int(np.sum(self.usable & within)), FEWEST_BINS)

    def at(self, frequency: Floats) -> tuple[Floats, Floats]:
        """Level and degrees of freedom at other frequencies; those above half the frame rate fold back."""
        top = self.frequency[-1]
        folded = np.abs((np.asarray(frequency) + top) % (2 * top) - top)
        return (
            np.interp(folded, self.frequency, self.level),
            np.interp(folded, self.frequency, self.degrees_of_freedom),
        )


def noise_spectrum(
    residual: Floats, grid: FrameGrid, *, fitted: Floats, harmonic: tuple[float, Floats] | None = None
) -> NoiseSpectrum:
    """Smoothed noise level of `residual` (N,) on `grid`.

    `fitted` (N, P) are the columns that were fitted: what they took out of each bin is put back. `harmonic` is (resolution in Hz, frequencies (H,) Hz to leave out): bins closer than half
    the resolution to one of them are not used. Raises ValueError where fewer than `FEWEST_BINS` bins are left.
    """
    power = np.abs(grid.spectrum(residual)) ** 2 * grid.size / len(residual)
    left = 1 - _leverage(fitted, grid)
    frequency = grid.frequency
    usable = np.ones(len(frequency), dtype=bool)
    usable[0] = False
    if harmonic is not None:
        resolution, lines = harmonic
        order = np.sort(lines)
        above = np.clip(np.searchsorted(order, frequency), 0, len(order) - 1)
        below = np.clip(above - 1, 0, len(order) - 1)
        distance = np.minimum(np.abs(order[above] - frequency), np.abs(order[below] - frequency))
        usable &= distance > 0.55 * resolution
    index = np.flatnonzero(usable)
    if len(index) < FEWEST_BINS:
        raise ValueError(f"only {len(index)} bins free of the excitation; {FEWEST_BINS} are needed")
    half = int(np.clip(len(index) // LARGEST_SHARE, FEWEST_BINS, MOST_BINS)) // 2
    total, share = (np.concatenate([[0.0], np.cumsum(v[index])]) for v in (power, left))
    centre = np.searchsorted(index, np.arange(len(frequency)))
    low = np.clip(centre - half, 0, max(len(index) - 2 * half, 0))
    high = np.minimum(low + 2 * half, len(index))
    level = (total[high] - total[low]) / np.maximum(share[high] - share[low], 0.1 * (high - low))
    return NoiseSpectrum(
        frequency=frequency,
        level=np.maximum(level, 1e-300),
        degrees_of_freedom=2.0 * (high - low),
        usable=usable,
    )


def _leverage(fitted: Floats, grid: FrameGrid) -> Floats:
    """Share of each bin's power that least squares on the columns `fitted` takes out of white noise (0 to 1)."""
    orthonormal, _ = np.linalg.qr(fitted / np.linalg.norm(fitted, axis=0))
    spectrum = grid.spectrum(orthonormal)
    return np.asarray(np.minimum(np.sum(np.abs(spectrum) ** 2, axis=1) * grid.size / len(fitted), 1.0))
