"""Which slot of a uniform grid does each frame belong to, and how regular are the stamps?

The sensor means to take a frame every interval; stamps jitter, are rounded, repeat, and frames get lost. The interval
is
found by counting slots from stamp to stamp and a straight line through the count; then every frame takes the nearest
slot.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["FrameGrid"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FrameGrid:
    """`slot` (N,) of every frame, strictly rising from 0, out of `size`; `interval` in s; `jitter` rms in s."""

    slot: NDArray[np.intp]
    size: int
    interval: float
    jitter: float

    @classmethod
    def from_stamps(cls, stamp: Floats) -> FrameGrid:
        """Grid of the stamps (N,), at least two, not falling; a repeated stamp takes the next slot."""
        gaps = np.diff(stamp)
        interval = float(np.median(gaps[gaps > 0])) if np.any(gaps > 0) else 1.0
        position = np.concatenate([[0.0], np.cumsum(np.round(gaps / interval))])
        for _ in range(2):
            if np.ptp(position) > 0:
                interval, begin = _line(position, stamp)
            position = np.round((stamp - begin) / interval)
        position = position - position[0]
        order = np.arange(len(stamp))
        slot = (np.maximum.accumulate(position - order) + order).astype(np.intp)
        return cls(
            slot=slot,
            size=int(slot[-1]) + 1,
            interval=interval,
            jitter=_scatter(position, stamp),
        )

    @property
    def lost(self) -> int:
        """Empty slots between the first and the last frame."""
        return self.size - len(self.slot)

    @property
    def before_gaps(self) -> NDArray[np.intp]:
        """Numbers of the frames that are followed by at least one empty slot."""
        return np.flatnonzero(np.diff(self.slot) > 1)

    @property
    def frequency(self) -> Floats:
        """Frequencies of `spectrum`, Hz."""
        return np.asarray(np.fft.rfftfreq(self.size, self.interval), dtype=float)

    @property
    def multiplicity(self) -> Floats:
        """How often each real-transform bin counts in a sum over the full circle (2, but 1 at the ends)."""
        count = np.full(len(self.frequency), 2.0)
        count[0] = 1.0
        if self.size % 2 == 0:
            count[-1] = 1.0
        return count

    def spectrum(self, values: Floats) -> NDArray[np.complex128]:
        """Unitary real Fourier transform along the first axis, empty slots zero."""
        full = np.zeros((self.size, *values.shape[1:]))
        full[self.slot] = values
        return np.asarray(np.fft.rfft(full, axis=0) / np.sqrt(self.size))

    def back(self, spectrum: NDArray[np.complex128]) -> Floats:
        """Inverse of `spectrum`, at the frames (N, ...)."""
        return np.asarray(np.fft.irfft(spectrum, self.size, axis=0) * np.sqrt(self.size))[self.slot]

    def filled(self, values: Floats) -> Floats:
        """`values` (N,) on the whole grid (size,), empty slots by straight lines."""
        return np.interp(np.arange(self.size), self.slot, values)


def _line(position: Floats, stamp: Floats) -> tuple[float, float]:
    """Slope and value at 0 of the least-squares line through the stamps; a level line through a single position."""
    middle = float(np.mean(position))
    apart = position - middle
    size = float(apart @ apart)
    slope = float(apart @ stamp) / size if size > 0 else 0.0
    return slope, float(np.mean(stamp)) - slope * middle


def _scatter(position: Floats, stamp: Floats) -> float:
    slope, begin = _line(position, stamp)
    return float(np.std(stamp - (begin + slope * position)))
