"""Which angle samples are nonsense? Those the fitted motion cannot come near.

A tracker sometimes jumps to something else. Samples farther from the fit than six robust standard deviations (1.4826 times the median
absolute deviation) are left out and the fit is repeated until none is new. More than a tenth of the record
is no outlier but a wrong model, and nothing is left out then.

Source: F. R. Hampel, JASA 69 (1974) 383-393 (median absolute deviation as scale for rejecting).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit, refine

__all__ = ["without_outliers"]

FARTHEST = 6.0
LARGEST_SHARE = 0.1
PASSES = 6


def without_outliers(record: Record, fit: RecordFit) -> tuple[Record, RecordFit, NDArray[np.float64]]:
    """The record and fit without outliers, and the stamps of those left out (L,), ascending."""
    everything = record
    stamps: list[float] = []
    for _ in range(PASSES):
        residual = fit.residual - np.median(fit.residual)
        scale = max(1.4826 * float(np.median(np.abs(residual))), 0.1 * float(np.std(residual)))
        far = np.abs(residual) > FARTHEST * scale
        if not far.any():
            break
        stamps.extend(record.stamp[far])
        if len(stamps) > LARGEST_SHARE * len(everything.stamp):
            return everything, refine(everything, fit.parameters) or fit, np.empty(0)
        record = record.keep(~far)
        fit = refine(record, fit.parameters) or fit
    return record, fit, np.sort(np.array(stamps))
