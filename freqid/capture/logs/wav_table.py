"""What does a WAV recording hold? One column a channel, in units of digital full scale.

Channels are named 1, 2, ... Integers of 8, 16, 24 or 32 bits are divided by their full scale, floating
point is taken as it stands, so that 1.0 is digital full scale in every case.
"""

from __future__ import annotations

import hashlib
import struct
import warnings
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from freqid.capture.logs.log_table import LogColumn, LogTable
from freqid.errors import LogError

__all__ = ["read_wav"]


def read_wav(path: Path) -> LogTable:
    """Read a WAV recording; the table's `sample_rate` is the file's.

    Raises
    ------
    LogError
        The file cannot be read or is damaged.
    """
    from scipy.io import wavfile

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", wavfile.WavFileWarning)  # further chunks (markers, tags) are no fault
            rate, samples = wavfile.read(path)
    except (OSError, ValueError, EOFError, IndexError, ArithmeticError, UnboundLocalError, struct.error) as fault:
        raise LogError(f"{path.name}: not a readable WAV file ({fault}); record or export it again") from fault
    channels = _full_scale_one(samples).reshape(len(samples), -1)
    return LogTable(
        source=path.name,
        sha256=hashlib.sha256(path.read_bytes()).hexdigest(),
        form="wav",
        columns=tuple(_channel(number, values) for number, values in enumerate(channels.T, 1)),
        lines=np.empty(0, dtype=np.int64),
        sample_rate=float(rate),
        notes=_clip_notes(channels, path.name),
    )


def _full_scale_one(samples: NDArray[np.generic]) -> NDArray[np.float64]:
    """Samples scaled to digital full scale 1.0; 24 bits arrive left-justified in 32."""
    kind, size = samples.dtype.kind, samples.dtype.itemsize
    if kind == "u":
        return (samples.astype(np.float64) - 128.0) / 128.0
    if kind == "i":
        return samples.astype(np.float64) / 2.0 ** (8 * size - 1)
    return samples.astype(np.float64)


def _channel(number: int, values: NDArray[np.float64]) -> LogColumn:
    numbers = np.ascontiguousarray(values)
    numbers.flags.writeable = False
    return LogColumn(number=number, name=str(number), unit=None, numbers=numbers)


def _clip_notes(channels: NDArray[np.float64], source: str) -> tuple[str, ...]:
    """One note for each channel with two or more successive samples at full scale."""
    at_full_scale = np.abs(channels) >= 1.0 - 2.0**-15
    clipped = np.sum(at_full_scale[1:] & at_full_scale[:-1], axis=0)
    return tuple(
        f"{source}: channel {number} clips, {count} successive samples at digital full scale"
        for number, count in enumerate(clipped, 1)
        if count
    )
