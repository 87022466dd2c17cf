"""How loud is the noise, frequency by frequency? A smoothed periodogram of the residual on the frame grid.

Frames keep their slot number; lost ones are empty. `level` is the noise variance that white noise of the same loudness
would
have, so white noise of variance s^2 has the level s^2 everywhere. Bins at the harmonics of a periodic excitation are
left
out: they hold the signal's own misfit. Windows are wide; so that steep noise is not flattened in them, the periodogram
is first
divided by the spectrum of an autoregression fitted to it (prewhitening), smoothed, and multiplied again. Towards low
frequencies a narrow window is taken where it differs from the wide one beyond chance. Between whole periods the
remaining bins carry the same information as the scatter from period to period (Parseval).

Source: R. Blackman & J. Tukey, *The Measurement of Power Spectra*, 1958 (prewhitening); Levinson-Durbin recursion and
order by the Bayesian criterion: G. Schwarz, Ann. Statist. 6 (1978) 461-464.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.frame_grid import FrameGrid

__all__ = ["NoiseSpectrum", "autoregression_of", "noise_spectrum"]

Floats = NDArray[np.float64]

FEWEST_BINS = 20
MOST_ELEMENTS = 1_000_000  # of the fitted columns, for the exact account of what they took from each bin
NARROWEST = 8  # bins of the lowest window
MOST_BINS = 60  # of a smoothing window: 120 degrees of freedom, yet narrow enough for coloured noise
LARGEST_SHARE = 8  # a smoothing window holds at most an eighth of the bins
HIGHEST_ORDER = 12  # of the autoregression that prewhitens
FLATTEST = 1e-4  # of the largest value: the autoregression claims no deeper valley


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NoiseSpectrum:
    """Noise level (B,) in angle unit squared at `frequency` (B,) Hz, and the degrees of freedom of each level."""

    frequency: Floats
    level: Floats
    degrees_of_freedom: Floats
    usable: NDArray[np.bool_]

    def freedom_between(self, low: float, high: float) -> float:
        """Real degrees of freedom of all used bins that levels between two frequencies rest on."""
        half = self.degrees_of_freedom[-1] / 4 * self.frequency[1]
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

    `fitted` (N, P) are the columns that were fitted: what they took out of each bin is put back. `harmonic` is
    (resolution in Hz, frequencies (H,) Hz to leave out): bins closer than half
    the resolution to one of them are not used. Raises ValueError where fewer than `FEWEST_BINS` bins are left.
    """
    power = np.abs(grid.spectrum(residual)) ** 2 * grid.size / len(residual)
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
    if harmonic is None or fitted.size <= MOST_ELEMENTS:
        left = 1 - _leverage(fitted, grid)
    else:
        # the fitted lines emptied the bins left out; what they took elsewhere is the rest of the balance
        n, columns = fitted.shape
        count = float(np.sum(grid.multiplicity[index]))
        left = np.full(len(frequency), min(1.0, (n - columns) * grid.size / (n * count)))
    widest = int(np.clip(len(index) // LARGEST_SHARE, FEWEST_BINS, MOST_BINS)) // 2
    shape = _shape(power / np.maximum(left, 0.1), index, grid)
    totals = [np.concatenate([[0.0], np.cumsum(v[index])]) for v in (power / shape, left)]
    centre = np.searchsorted(index, np.arange(len(frequency)))
    wide, wide_freedom = _window_means(totals, centre, np.full(len(frequency), widest))
    narrow, narrow_freedom = _window_means(totals, centre, np.clip(centre // 3, NARROWEST // 2, widest))
    coloured = _differ(narrow / wide, narrow_freedom, wide_freedom)
    return NoiseSpectrum(
        frequency=frequency,
        level=np.maximum(shape * np.where(coloured, narrow, wide), 1e-300),
        degrees_of_freedom=np.where(coloured, narrow_freedom, wide_freedom),
        usable=usable,
    )


def autoregression_of(noise: Floats) -> Floats:
    """Prediction-error filter (p + 1,), first coefficient 1, fitted to noise (N,) on a uniform grid; (1,) where it is
    white.
    """
    power = np.abs(np.fft.rfft(noise - np.mean(noise))) ** 2
    return _autoregression(np.fft.irfft(power, len(noise))[: HIGHEST_ORDER + 1], count=len(noise))


def _shape(power: Floats, index: NDArray[np.intp], grid: FrameGrid) -> Floats:
    """Rough spectrum (B,), mean 1, of an autoregression fitted to the powers (B,) of the bins `index`; 1 where the
    noise is white.
    """
    filled = np.interp(np.arange(len(power)), index, power[index])
    lags = np.fft.irfft(filled, grid.size)
    polynomial = _autoregression(lags[: HIGHEST_ORDER + 1], count=2 * len(index))
    if len(polynomial) == 1:
        return np.ones(len(power))
    turn = np.exp(-2j * np.pi * np.outer(np.arange(len(power)) / grid.size, np.arange(len(polynomial))))
    shape = 1 / np.abs(turn @ polynomial) ** 2
    shape = np.maximum(shape, FLATTEST * np.max(shape))
    return np.asarray(shape / np.mean(shape))


def _autoregression(lags: Floats, *, count: int) -> Floats:
    """Prediction-error filter (p + 1,) for the autocovariance `lags`, of the order with the smallest Bayesian
    criterion.
    """
    polynomial, error = np.ones(1), float(lags[0])
    best, smallest = polynomial, 0.0
    for order in range(1, len(lags)):
        reflection = -float(polynomial @ lags[order:0:-1]) / error
        if not abs(reflection) < 1:
            break
        polynomial = np.append(polynomial, 0.0) + reflection * np.append(polynomial, 0.0)[::-1]
        error *= 1 - reflection**2
        criterion = count * np.log(error / float(lags[0])) + (order + 1) * np.log(count)
        if criterion < smallest:
            best, smallest = polynomial, criterion
    return best


def _window_means(totals: list[Floats], centre: NDArray[np.intp], half: NDArray[np.intp]) -> tuple[Floats, Floats]:
    """Mean power of the bins within `half` of each centre, and its real degrees of freedom; ends use the nearest full
    window.
    """
    last = len(totals[0]) - 1
    low = np.clip(centre - half, 0, np.maximum(last - 2 * half, 0))
    high = np.minimum(low + 2 * half, last)
    power, share = (total[high] - total[low] for total in totals)
    return power / np.maximum(share, 0.1 * (high - low)), 2.0 * (high - low)


def _differ(ratio: Floats, first: Floats, second: Floats) -> NDArray[np.bool_]:
    """Whether two mean powers differ beyond chance (1 % by Fisher's F; the windows overlap, which makes it rarer)."""
    from scipy.special import fdtri

    # few pairs of degrees of freedom, and a quantile takes long
    pairs, which = np.unique(first + 1j * second, return_inverse=True)
    low, high = (fdtri(pairs.real, pairs.imag, p)[which] for p in (0.005, 0.995))
    return np.asarray((ratio > high) | (ratio < low))


def _leverage(fitted: Floats, grid: FrameGrid) -> Floats:
    """Share of each bin's power that least squares on the columns `fitted` takes out of white noise (0 to 1)."""
    scaled = fitted / np.maximum(np.linalg.norm(fitted, axis=0), 1e-300)
    gram = scaled.T @ scaled + 1e-10 * np.eye(scaled.shape[1])
    orthonormal = np.linalg.solve(np.linalg.cholesky(gram), scaled.T).T
    spectrum = grid.spectrum(orthonormal)
    return np.asarray(np.minimum(np.sum(np.abs(spectrum) ** 2, axis=1) * grid.size / len(fitted), 1.0))
