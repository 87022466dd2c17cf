"""What is a cell of a text log: a number, a time stamp, nothing, or text?

A number has a decimal point or a decimal comma, never both and no thousands separator. A missing value
is an empty cell or one of the words loggers write for it; infinity (an overload) counts as missing.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Literal

import numpy as np
from numpy.typing import NDArray

__all__ = ["WHITE_SPACE", "Cell", "ColumnNumbers", "Decimal", "cell_kind", "column_numbers", "split_cells"]

Decimal = Literal[".", ","]
Cell = Literal["number", "stamp", "missing", "text"]
WHITE_SPACE = " "  # stands for any run of blanks and tabs

_NUMBER: Mapping[str, re.Pattern[str]] = MappingProxyType(
    {
        ".": re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?", re.ASCII),
        ",": re.compile(r"[+-]?(?:\d+(?:,\d+)?|,\d+)(?:[eE][+-]?\d+)?", re.ASCII),
    }
)
_STAMP = re.compile(
    r"\d{4}-\d\d-\d\d(?:[T ]\d\d:\d\d.*)?|\d{1,2}:\d\d(?::\d\d)?(?:[.,]\d+)?", re.ASCII
)  # ISO 8601 date-time, or a clock time
_OVERLOADS = ("inf", "+inf", "-inf", "infinity", "-infinity")
_MISSING = frozenset(
    ["", "nan", "+nan", "-nan", "n/a", "na", "#n/a", "null", "none", "-", "--", "---", "?", *_OVERLOADS]
)
_BLANK_OR_QUOTED = re.compile(r'"[^"]*"|\S+')


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ColumnNumbers:
    """A column read as numbers (N,), NaN where missing; which cells are text, and how many are numbers."""

    values: NDArray[np.float64]
    text_rows: tuple[int, ...]
    n_numbers: int


def cell_kind(cell: str, decimal: str) -> Cell:
    """What the stripped `cell` is under the decimal sign `decimal`."""
    if _NUMBER[decimal].fullmatch(cell):
        return "number"
    if cell.casefold() in _MISSING:
        return "missing"
    return "stamp" if _STAMP.fullmatch(cell) else "text"


def split_cells(line: str, separator: str) -> list[str]:
    """The stripped cells of one line, quotes removed; a separator within quotes does not separate."""
    if '"' not in line:
        cells = line.split() if separator == WHITE_SPACE else line.split(separator)
    elif separator == WHITE_SPACE:
        cells = [cell.strip('"') for cell in _BLANK_OR_QUOTED.findall(line)]
    else:
        cells = _split_quoted(line, separator)
    return [cell.strip() for cell in cells]


def column_numbers(cells: Sequence[str], decimal: str) -> ColumnNumbers:
    """Read a column's cells (N) as numbers: at once where every cell is one, else cell by cell."""
    if values := _all_numbers(cells, decimal):
        return values
    numbers = np.full(len(cells), np.nan)
    text_rows: list[int] = []
    n_numbers = 0
    for row, cell in enumerate(cells):
        kind = cell_kind(cell.strip(), decimal)
        if kind == "number":
            numbers[row] = float(cell.replace(",", "."))
            n_numbers += 1
        elif kind != "missing":
            text_rows.append(row)
    return ColumnNumbers(values=_without_infinity(numbers), text_rows=tuple(text_rows), n_numbers=n_numbers)


def _all_numbers(cells: Sequence[str], decimal: str) -> ColumnNumbers | None:
    """The quick reading; None where a cell is not a plain number (Python would accept 1_0 and other digits)."""
    joined = "".join(cells)
    if not joined.isascii() or "_" in joined or (decimal == "," and "." in joined):
        return None
    try:
        plain = [cell.replace(",", ".") for cell in cells] if decimal == "," else cells
        values = np.fromiter(map(float, plain), dtype=np.float64, count=len(plain))
    except ValueError:
        return None
    values = _without_infinity(values)
    return ColumnNumbers(values=values, text_rows=(), n_numbers=int(np.isfinite(values).sum()))


def _without_infinity(values: NDArray[np.float64]) -> NDArray[np.float64]:
    values[np.isinf(values)] = np.nan
    return values


def _split_quoted(line: str, separator: str) -> list[str]:
    try:
        return next(csv.reader([line], delimiter=separator, skipinitialspace=True))
    except (csv.Error, StopIteration):
        return line.split(separator)
