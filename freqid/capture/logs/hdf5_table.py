"""What does an HDF5 log hold? One column for each one-dimensional dataset, with the unit it states.

A dataset of two dimensions gives one column for each of its columns, `name[1]`, `name[2]`, ... A
`sample_rate` attribute of the file is its rate in Hz. Datasets of different length stay apart: columns
chosen together must be equally long.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from freqid.capture.logs.log_table import LogColumn, LogTable
from freqid.capture.logs.units import canonical_unit, unit_in_name
from freqid.errors import LogError

__all__ = ["read_hdf5_log"]


def read_hdf5_log(path: Path) -> LogTable:
    """Read the numeric datasets of an HDF5 file as columns.

    Raises
    ------
    LogError
        The file cannot be read, or holds no numeric dataset of one or two dimensions.
    """
    from excitation.hdf5_file import file_sha256, read_hdf5

    try:
        content = read_hdf5(path)
        sha256 = file_sha256(path)
    except (OSError, ValueError) as fault:
        raise LogError(f"{path.name}: not a readable HDF5 file ({fault}); record or export it again") from fault
    columns: list[LogColumn] = []
    for name, array in content.datasets.items():
        for title, values in _series(name, np.asarray(array)):
            stated = content.units.get(name)
            unit = stated if stated and stated != "1" else unit_in_name(title)
            known = canonical_unit(unit) or unit if unit else None
            columns.append(LogColumn(number=len(columns) + 1, name=title, unit=known, numbers=values))
    if not columns:
        raise LogError(f"{path.name}: no numeric dataset of one or two dimensions; export time, voltage and angle")
    return LogTable(
        source=path.name,
        sha256=sha256,
        form="hdf5",
        columns=tuple(columns),
        lines=np.empty(0, dtype=np.int64),
        sample_rate=_stated_rate(content.attributes.get("sample_rate")),
    )


def _series(name: str, array: NDArray[np.generic]) -> list[tuple[str, NDArray[np.float64]]]:
    """The columns of one dataset; none for text, a single number or more than two dimensions."""
    if array.dtype.kind not in "iuf" or array.ndim not in (1, 2):
        return []
    numbers = array.astype(np.float64)
    numbers[np.isinf(numbers)] = np.nan
    numbers.flags.writeable = False
    if numbers.ndim == 1:
        return [(name, numbers)]
    return [(f"{name}[{column + 1}]", numbers[:, column]) for column in range(numbers.shape[1])]


def _stated_rate(value: object) -> float | None:
    if isinstance(value, int | float) and np.isfinite(value) and value > 0:
        return float(value)
    return None
