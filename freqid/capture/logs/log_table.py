"""What did a log hold? Named columns of numbers or text, with the line each row came from.

A table is what stands in the file, nothing chosen or converted yet: which column is the time, and in
which unit, is decided later and told in a note. Columns are counted from 1, as people count them.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from freqid.errors import LogError

__all__ = ["LogColumn", "LogForm", "LogTable"]

Floats = NDArray[np.float64]
LogForm = Literal["text", "wav", "hdf5"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LogColumn:
    """One column as written: `numbers` (N,) with NaN for empty cells, or `text` where it is not numeric.

    `fault` says in a sentence which cell keeps a column of mostly numbers from being read as numbers.
    """

    number: int
    name: str
    unit: str | None
    numbers: Floats | None = None
    text: tuple[str, ...] | None = None
    fault: str | None = None

    @property
    def first_value(self) -> str:
        """The first cell that is not empty, as text."""
        if self.numbers is not None:
            finite = np.flatnonzero(np.isfinite(self.numbers))
            return f"{self.numbers[finite[0]]:g}" if finite.size else "empty"
        return next((cell for cell in self.text or () if cell), "empty")

    def __str__(self) -> str:
        unit = f" [{self.unit}]" if self.unit else ""
        return f'{self.number} "{self.name}"{unit} {self.first_value}'


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LogTable:
    """A log as read: its columns, its file's name and sha256, and what was noticed on reading.

    `lines` (N,) is the line of the file each row stands on, counted from 1; empty where the file has no
    lines. `sample_rate` (Hz) is the rate the file itself states (WAV), None otherwise.
    """

    source: str
    sha256: str
    form: LogForm
    columns: tuple[LogColumn, ...]
    lines: NDArray[np.int64]
    sample_rate: float | None = None
    notes: tuple[str, ...] = ()

    def where(self, row: int) -> str:
        """Where row `row` (from 0) stands in the file, for messages."""
        return f"line {self.lines[row]}" if self.lines.size else f"sample {row + 1}"

    def listing(self) -> str:
        """Every column in one line: number, name, unit, first value."""
        return "; ".join(str(column) for column in self.columns)

    def numbers(self, column: LogColumn) -> Floats:
        """The numbers of `column` (N,).

        Raises
        ------
        LogError
            The column holds text, or a cell of it cannot be read as a number.
        """
        if column.numbers is not None:
            return column.numbers
        reason = column.fault or f'column {column.number} "{column.name}" holds text ("{column.first_value}")'
        raise LogError(f"{self.source}: {reason}; correct the file or choose a column of numbers")
