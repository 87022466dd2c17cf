"""Which angle samples are nonsense? Those the fitted motion cannot come near.

A tracker sometimes jumps to something else for a frame or a few. Such samples stand farther from the fit than six
robust standard
deviations (1.4826 times the median absolute deviation), and five times farther than their neighbours usually do: the
misfit of a
wrong model moves smoothly and is none. They are left out and the fit is repeated until none is new. More than a tenth
of the
record is no outlier, and nothing is left out then.

Source: F. R. Hampel, JASA 69 (1974) 383-393 (median absolute deviation as scale for rejecting).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit, refine

__all__ = ["spikes", "without_outliers"]

FARTHEST = 6.0
LARGEST_SHARE = 0.1
PASSES = 6
NEIGHBOURS = 4  # frames on either side
ABOVE_NEIGHBOURS = 5.0


def without_outliers(record: Record, fit: RecordFit) -> tuple[Record, RecordFit, NDArray[np.float64]]:
    """The record and fit without outliers, and the stamps of those left out (L,), ascending."""
    everything = record
    stamps: list[float] = []
    for _ in range(PASSES):
        far = spikes(fit.residual, farthest=FARTHEST)
        if not far.any():
            break
        stamps.extend(record.stamp[far])
        if len(stamps) > LARGEST_SHARE * len(everything.stamp):
            return everything, refine(everything, fit.parameters) or fit, np.empty(0)
        record = record.keep(~far)
        fit = refine(record, fit.parameters) or fit
    return record, fit, np.sort(np.array(stamps))


def spikes(residual: NDArray[np.float64], *, farthest: float) -> NDArray[np.bool_]:
    """Which residuals (N,) stand farther off than `farthest` robust deviations, and far off what is usual around
    them.
    """
    size = np.abs(residual - np.median(residual))
    scale = max(1.4826 * float(np.median(size)), 0.1 * float(np.std(residual)))
    around = np.lib.stride_tricks.sliding_window_view(np.pad(size, NEIGHBOURS, mode="reflect"), 2 * NEIGHBOURS + 1)
    return np.asarray((size > farthest * scale) & (size > ABOVE_NEIGHBOURS * np.median(around, axis=1)))
