"""Which instant does a written stamp mean? ISO 8601 date-times and clock times, in seconds.

Date-times (`2024-05-01T12:00:00.250`, with `Z` or `+02:00` or without a zone) become seconds from the
first; clock times (`12:00:00.250`) become seconds since midnight.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

import numpy as np
from numpy.typing import NDArray

from freqid.capture.logs.log_table import LogColumn, LogTable
from freqid.errors import LogError
from freqid.quantity import in_unit

__all__ = ["StampSeconds", "read_stamps"]

_CLOCK = re.compile(r"(\d{1,2}):(\d\d)(?::(\d\d(?:[.,]\d+)?))?", re.ASCII)
_SECOND = timedelta(seconds=1)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StampSeconds:
    """Stamps (N,) in s, NaN where a cell is empty, and what they count from."""

    seconds: NDArray[np.float64] = in_unit("s")
    note: str


def read_stamps(table: LogTable, column: LogColumn) -> StampSeconds:
    """Read a column of written stamps.

    Raises
    ------
    LogError
        A cell is neither an ISO 8601 date-time nor a clock time, or some stamps have a zone and some not.
    """
    cells = column.text or ()
    first = next((cell for cell in cells if cell), "")
    if _CLOCK.fullmatch(first):
        return StampSeconds(seconds=_read_each(table, column, _clock_seconds), note="clock times, in s since midnight")
    moments = [_moment(table, column, row) for row in range(len(cells))]
    start = next((moment for moment in moments if moment is not None), None)
    if start is None:
        raise LogError(f'{table.source}: the time column "{column.name}" is empty; choose --time-column')
    try:
        seconds = [np.nan if moment is None else (moment - start) / _SECOND for moment in moments]
    except TypeError as fault:
        raise LogError(
            f'{table.source}: in the time column "{column.name}" some stamps have a zone and some have none; '
            f"write them alike"
        ) from fault
    return StampSeconds(seconds=np.array(seconds), note=f"date-times, in s from the first, {first}")


def _moment(table: LogTable, column: LogColumn, row: int) -> datetime | None:
    cell = _cells(column)[row]
    if not cell:
        return None
    try:
        return datetime.fromisoformat(cell)
    except ValueError as fault:
        raise LogError(_not_a_time(table, column, row)) from fault


def _read_each(table: LogTable, column: LogColumn, read: Callable[[str], float]) -> NDArray[np.float64]:
    seconds = np.full(len(_cells(column)), np.nan)
    for row, cell in enumerate(_cells(column)):
        if cell:
            try:
                seconds[row] = read(cell)
            except ValueError as fault:
                raise LogError(_not_a_time(table, column, row)) from fault
    return seconds


def _clock_seconds(cell: str) -> float:
    match = _CLOCK.fullmatch(cell)
    if match is None:
        raise ValueError(cell)
    hours, minutes, seconds = match.groups()
    return int(hours) * 3600 + int(minutes) * 60 + float((seconds or "0").replace(",", "."))


def _not_a_time(table: LogTable, column: LogColumn, row: int) -> str:
    return (
        f'{table.source}: {table.where(row)}, column {column.number} "{column.name}": "{_cells(column)[row][:40]}" is '
        f"neither a number nor an ISO 8601 date-time nor a clock time; choose --time-column"
    )


def _cells(column: LogColumn) -> Sequence[str]:
    return column.text or ()
