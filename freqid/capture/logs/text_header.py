"""Which lines above the data name the columns and their units?

The nearest line above the data with one cell for each column names them, be it plain or a comment; a line
below it that holds units only ("s;V;°") is the unit row. Whatever else stands above is preamble.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from freqid.capture.logs.text_cells import cell_kind, split_cells
from freqid.capture.logs.text_dialect import COMMENT_MARKS, Dialect, is_comment, trimmed
from freqid.capture.logs.units import canonical_unit, unit_in_name

__all__ = ["Header", "read_header"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Header:
    """Names and units, one for each column; `found` is false where the columns are only numbered."""

    names: tuple[str, ...]
    units: tuple[str | None, ...]
    found: bool


def read_header(preamble: Sequence[str], dialect: Dialect) -> Header:
    """Names and units from the lines above the data; without a header the columns are named 1, 2, ..."""
    rows = [
        _cells(line, dialect) for line in preamble if any(character.isalnum() or character == "°" for character in line)
    ]
    units: list[str] | None = None
    if rows and _is_unit_row(rows[-1], dialect) and (len(rows) > 1 or dialect.width > 1):
        units = rows.pop()
    names = next((row for row in reversed(rows) if _fits(row, dialect)), None)
    if names is None and rows and len(rows[-1]) > dialect.width > 1:
        names = rows[-1]  # the data leave columns at the end empty
    if names is None and units is not None and not rows:
        names, units = units, None  # a lone line such as "V;deg" is all there is of a header
    if names is None:
        numbered = tuple(str(number + 1) for number in range(dialect.width))
        return Header(names=numbered, units=_padded_units(units, [None] * dialect.width), found=False)
    width = max(dialect.width, len(names))
    filled = [name or str(number + 1) for number, name in enumerate(names + [""] * (width - len(names)))]
    return Header(names=tuple(filled), units=_padded_units(units, [unit_in_name(name) for name in filled]), found=True)


def _cells(line: str, dialect: Dialect) -> list[str]:
    text = line.strip("\n")
    if is_comment(line, dialect.separator):
        text = text.lstrip()
        mark = next((mark for mark in COMMENT_MARKS if text.startswith(mark)), ";")
        text = text[len(mark) :].lstrip("#%/ ") if mark != ";" else text[1:]
    return trimmed(split_cells(text, dialect.separator))


def _fits(row: Sequence[str], dialect: Dialect) -> bool:
    """One cell a column (or as many as are not empty), and at most half of them numbers."""
    numbers = sum(cell_kind(cell, dialect.decimal) == "number" for cell in row)
    return len(row) == dialect.width and 2 * numbers <= len(row)


def _is_unit_row(row: Sequence[str], dialect: Dialect) -> bool:
    words = [cell for cell in row if cell and cell not in "-1"]
    named = all(canonical_unit(word) or (word[0] in "([" and word[-1] in ")]") for word in words)
    return bool(words) and named and len(row) <= dialect.width


def _padded_units(row: Sequence[str] | None, from_names: list[str | None]) -> tuple[str | None, ...]:
    if row is None:
        return tuple(from_names)
    units = [canonical_unit(cell) or cell.strip("()[]") or None for cell in row]
    units += [None] * (len(from_names) - len(units))
    return tuple(unit or named for unit, named in zip(units, from_names, strict=False))
