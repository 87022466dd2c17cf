"""What does a delimited text log hold, however it is written?

Separator, decimal sign, encoding, header, unit row, comments and preamble are found from the file
itself. A damaged row is an error that names file, line and column; a last line that was cut short
is dropped with a note. Text columns and further columns are kept and do no harm.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from pathlib import Path
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from freqid.capture.logs.log_table import LogColumn, LogTable
from freqid.capture.logs.text_block import regular_rows
from freqid.capture.logs.text_cells import WHITE_SPACE, ColumnNumbers, Decimal, cell_kind, column_numbers, split_cells
from freqid.capture.logs.text_dialect import COMMENT_MARKS, Dialect, find_dialect, is_comment, trimmed
from freqid.capture.logs.text_header import Header, read_header
from freqid.capture.logs.text_lines import decoded, split_lines
from freqid.errors import LogError

__all__ = ["read_csv"]

_Number = TypeVar("_Number", np.float64, np.int64)
_Body = tuple[tuple[LogColumn, ...], list[int], list[str]]  # columns, line number of each row, notes


def read_csv(path: Path, *, decimal: Decimal | None = None) -> LogTable:
    """Read a delimited text log.

    Parameters
    ----------
    path : Path
        Any text with separated columns: `,` `;` tab `|` or white space.
    decimal : {".", ","}, optional
        The decimal sign; found from the data unless stated.

    Returns
    -------
    LogTable
        Numeric columns with NaN for empty cells; columns of text as text.

    Raises
    ------
    LogError
        The file cannot be read, is empty, holds no numbers, or a row is damaged.
    """
    try:
        content = path.read_bytes()
    except OSError as fault:
        raise LogError(f"{path.name}: cannot be read ({fault.strerror}); check the name and the folder") from fault
    lines = _text_lines(content, path.name)
    dialect = find_dialect(lines, decimal)
    first = next((n for n, line in enumerate(lines) if dialect and _is_row(line, dialect)), None)
    if dialect is None or first is None:
        raise LogError(_no_numbers(lines, path.name))
    _refuse_short_first_row(lines[:first], dialect, path.name)
    header = read_header(lines[:first], dialect)
    columns, numbers, notes = _regular(lines, first, header, dialect) or _careful(
        lines, first, header, dialect, path.name
    )
    if not header.found:
        notes.insert(0, f"{path.name} has no header; its columns are numbered from 1")
    return LogTable(
        source=path.name,
        sha256=hashlib.sha256(content).hexdigest(),
        form="text",
        columns=columns,
        lines=_read_only(np.asarray(numbers, dtype=np.int64)),
        notes=tuple(notes),
    )


def _text_lines(content: bytes, source: str) -> list[str]:
    text = decoded(content)
    if text is None:
        raise LogError(f"{source}: neither text nor WAV nor HDF5; export the log as text with separated columns")
    if not text.strip():
        raise LogError(f"{source}: the file is empty; record or export the log again")
    return split_lines(text)


def _no_numbers(lines: Sequence[str], source: str) -> str:
    filled = [line.strip() for line in lines if line.strip()]
    if len(filled) <= 2:
        return (
            f'{source}: a header only ("{filled[0][:60]}"), no row of numbers below it; record or export the log again'
        )
    return f'{source}: no line with a number in {len(filled)} lines (the first is "{filled[0][:60]}"); is it a log?'


def _refuse_short_first_row(above: Sequence[str], dialect: Dialect, source: str) -> None:
    """Two numbers or more and nothing else, right above the first whole row, are a row that lost its end."""
    line = len(above)
    while line and not above[line - 1].strip():
        line -= 1
    cells = split_cells(above[line - 1], dialect.separator) if line else []
    if len(cells) > 1 and all(cell_kind(cell, dialect.decimal) == "number" for cell in cells):
        raise LogError(
            f"{source}: line {line} ends before column {len(cells) + 1} of {dialect.width}; correct or remove the line"
        )


def _is_row(line: str, dialect: Dialect) -> bool:
    return bool(line.strip()) and not is_comment(line, dialect.separator) and dialect.starts_data(line)


def _regular(lines: Sequence[str], first: int, header: Header, dialect: Dialect) -> _Body | None:
    """The quick reading of plain rows up to the last line that is not blank; None where they are not plain."""
    last = len(lines)
    while not lines[last - 1].strip():
        last -= 1
    values = regular_rows(lines[first:last], dialect)
    if values is None or len(header.names) != dialect.width:
        return None
    columns = tuple(
        LogColumn(number=index + 1, name=name, unit=header.units[index], numbers=_read_only(values[:, index].copy()))
        for index, name in enumerate(header.names)
    )
    return columns, list(range(first + 1, last + 1)), []


def _careful(lines: Sequence[str], first: int, header: Header, dialect: Dialect, source: str) -> _Body:
    """The reading cell by cell."""
    numbers, rows = _rows(lines, first, dialect)
    notes = _check_widths(rows, numbers, header, source)
    columns, cut = _columns(rows, numbers, header, dialect)
    if cut:
        numbers, notes = numbers[:-1], [_cut_note(numbers[-1])]
    return columns, numbers, notes


def _rows(lines: Sequence[str], first: int, dialect: Dialect) -> tuple[list[int], list[list[str]]]:
    """Line numbers (from 1) and cells of the rows from line `first` on, comments and blank lines left out."""
    marks = {mark[0] for mark in COMMENT_MARKS} | {";"}
    separator = dialect.separator
    numbers: list[int] = []
    rows: list[list[str]] = []
    for number, line in enumerate(lines[first:], first + 1):
        start = line.lstrip()
        if not start or (start[0] in marks and is_comment(start, separator)):
            continue
        numbers.append(number)
        if '"' in line:
            rows.append(split_cells(line, separator))
        else:
            rows.append(line.split() if separator == WHITE_SPACE else line.split(separator))
    return numbers, rows


def _check_widths(rows: list[list[str]], numbers: list[int], header: Header, source: str) -> list[str]:
    """Bring every row to the header's width; a short or long one is damage, or the cut last line, then dropped."""
    width, full = len(header.names), max(set(map(len, rows)), key=[len(row) for row in rows].count)
    if set(map(len, rows)) == {width}:
        return []
    for index, row in enumerate(rows):
        if len(row) == width:
            continue
        cells = trimmed([cell.strip() for cell in row])
        if len(cells) <= width and len(row) >= min(full, width):
            rows[index] = cells + [""] * (width - len(cells))
        elif index == len(rows) - 1 and len(cells) < width and index > 0:
            del rows[index], numbers[index + 1 :]
            return [_cut_note(numbers.pop())]
        else:
            raise LogError(_damage(row, numbers[index], header, source))
    return []


def _damage(row: Sequence[str], line: int, header: Header, source: str) -> str:
    width = len(header.names)
    if len(row) > width:
        return f"{source}: line {line} has {len(row)} cells, the table has {width} columns; correct or remove the line"
    name = header.names[len(row)]
    return f'{source}: line {line} ends before column {len(row) + 1} "{name}" of {width}; correct or remove the line'


def _cut_note(line: int) -> str:
    return f"the last line (line {line}) is cut short and was left out"


def _columns(
    rows: list[list[str]], lines: list[int], header: Header, dialect: Dialect
) -> tuple[tuple[LogColumn, ...], bool]:
    """The columns, and whether the last row was left out because a number in it is cut short."""
    cells = list(zip(*rows, strict=True))
    read = [column_numbers(column, dialect.decimal) for column in cells]
    cut = len(rows) > 1 and any(one.text_rows == (len(rows) - 1,) and one.n_numbers > 1 for one in read)
    if cut:
        return _columns(rows[:-1], lines, header, dialect)[0], True
    columns = [_column(number, cells[number], read[number], lines, header) for number in range(len(header.names))]
    return tuple(column for column in columns if not _is_padding(column, header)), False


def _column(index: int, cells: Sequence[str], read: ColumnNumbers, lines: Sequence[int], header: Header) -> LogColumn:
    """Numbers where every filled cell is one; else text, with the fault if it was meant to be numbers."""
    number, name, unit = index + 1, header.names[index], header.units[index]
    if not read.text_rows:
        return LogColumn(number=number, name=name, unit=unit, numbers=_read_only(read.values))
    text = tuple(cell.strip() for cell in cells)
    fault = None
    if read.n_numbers >= len(read.text_rows):
        row = read.text_rows[0]
        fault = f'line {lines[row]}, column {number} "{name}": "{text[row][:40]}" is not a number'
    return LogColumn(number=number, name=name, unit=unit, text=text, fault=fault)


def _is_padding(column: LogColumn, header: Header) -> bool:
    """An unnamed column without a number, left by a separator at the beginning of each line."""
    unnamed = column.name == str(column.number)
    return header.found and unnamed and column.numbers is not None and not np.isfinite(column.numbers).any()


def _read_only(array: NDArray[_Number]) -> NDArray[_Number]:
    array.flags.writeable = False
    return array
