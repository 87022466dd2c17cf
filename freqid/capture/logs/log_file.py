"""Which reader does a log need? Its first bytes tell; its ending does not count.

WAV begins with RIFF or RF64, HDF5 with its signature (HDF5 File Format Specification, II.A); whatever
else is read as text.
"""

from __future__ import annotations

from pathlib import Path

from freqid.capture.logs.log_table import LogTable
from freqid.capture.logs.text_cells import Decimal
from freqid.errors import LogError

__all__ = ["open_log"]

_HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"
_WAV_SIGNATURES = (b"RIFF", b"RIFX", b"RF64")


def open_log(path: Path, *, decimal: Decimal | None = None) -> LogTable:
    """Read a log of any kind: delimited text, WAV or HDF5.

    Parameters
    ----------
    path : Path
        The log.
    decimal : {".", ","}, optional
        The decimal sign of a text log; found from the data unless stated.

    Raises
    ------
    LogError
        The file is missing, empty or damaged.
    """
    if path.is_dir():
        raise LogError(f"{path.name}: a folder, not a log; give the file")
    try:
        with path.open("rb") as file:
            beginning = file.read(16)
    except OSError as fault:
        reason = "no such file" if isinstance(fault, FileNotFoundError) else f"cannot be read ({fault.strerror})"
        raise LogError(f"{path}: {reason}; check the name and the folder") from fault
    if beginning.startswith(_HDF5_SIGNATURE):
        from freqid.capture.logs.hdf5_table import read_hdf5_log

        return read_hdf5_log(path)
    if beginning.startswith(_WAV_SIGNATURES):
        from freqid.capture.logs.wav_table import read_wav

        return read_wav(path)
    from freqid.capture.logs.csv_table import read_csv

    return read_csv(path, decimal=decimal)
