"""How is a text log written: what separates its cells, and is the decimal sign a point or a comma?

Every separator is tried with both decimal signs on lines from the beginning, the middle and the end of
the file. The pair that makes most cells of most lines numbers or time stamps, with the same number
of cells in each line, wins; between equals the one that fits the header, then the one with more
columns, then the order of `CANDIDATES`.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from freqid.capture.logs.text_cells import WHITE_SPACE, Cell, Decimal, cell_kind, split_cells

__all__ = ["Dialect", "find_dialect", "is_comment", "trimmed"]

CANDIDATES = ("\t", ";", ",", "|", WHITE_SPACE)
SAMPLE = 80  # lines from each of the three places
COMMENT_MARKS = ("#", "%", "//")


@dataclass(frozen=True, slots=True, kw_only=True)
class Dialect:
    """The separator, the decimal sign, and what each column mostly holds ("missing": nothing in the sample)."""

    separator: str
    decimal: Decimal
    kinds: tuple[Cell, ...]

    @property
    def width(self) -> int:
        """Number of columns up to the last that holds anything."""
        return len(self.kinds)

    def starts_data(self, line: str) -> bool:
        """Whether `line` is a row: a cell for each column, and half of the columns of numbers hold numbers."""
        written = split_cells(line, self.separator)
        cells = trimmed(written)
        if len(cells) > self.width or len(written) < self.width:
            return False
        cells += [""] * (self.width - len(cells))
        kinds = [
            cell_kind(cell, self.decimal) for cell, kind in zip(cells, self.kinds, strict=True) if kind == "number"
        ]
        return "number" in kinds and 2 * sum(kind in ("number", "missing") for kind in kinds) >= len(kinds)


def find_dialect(lines: Sequence[str], decimal: Decimal | None = None) -> Dialect | None:
    """The dialect of `lines` (all lines of the file); None where no line holds a number.

    Parameters
    ----------
    lines : sequence of str
        Every line of the file, comments and preamble included.
    decimal : {".", ","}, optional
        The decimal sign, where the user states it.
    """
    sample = _sample(lines)
    quoted = any('"' in line for line in sample)
    signs: tuple[Decimal, ...] = (".", ",") if decimal is None else (decimal,)
    best: tuple[tuple[float, bool, int], Dialect] | None = None
    for sign in signs:
        for separator in CANDIDATES:
            if separator == sign and not quoted:
                continue  # only within quotes can the same sign be both
            judged = _judge(sample, separator, sign)
            if judged is not None and (best is None or judged[0] > best[0]):
                best = judged
    if best is None:
        return None
    found = best[1]
    if decimal is None and found.decimal == "." and _comma_elsewhere(lines, found):
        return Dialect(separator=found.separator, decimal=",", kinds=found.kinds)
    return found


def is_comment(line: str, separator: str) -> bool:
    """Whether the line is a comment; ";" marks one unless it separates the cells."""
    start = line.lstrip()
    return start.startswith(COMMENT_MARKS) or (separator != ";" and start.startswith(";"))


def trimmed(cells: list[str]) -> list[str]:
    """The cells without empty ones at the end (trailing separators)."""
    end = len(cells)
    while end and not cells[end - 1]:
        end -= 1
    return cells[:end]


def _sample(lines: Sequence[str]) -> list[str]:
    """Lines from the beginning, the middle and the end; the last may be cut short and is left out of a long file."""
    if len(lines) <= 3 * SAMPLE:
        return [line for line in lines if line.strip()]
    middle = len(lines) // 2
    chosen = [*lines[:SAMPLE], *lines[middle : middle + SAMPLE], *lines[-SAMPLE - 2 : -2]]
    return [line for line in chosen if line.strip()]


def _judge(sample: Sequence[str], separator: str, decimal: Decimal) -> tuple[tuple[float, bool, int], Dialect] | None:
    lines = [line for line in sample if not is_comment(line, separator)]
    rows = [split_cells(line, separator) for line in lines]
    kinds = [[cell_kind(cell, decimal) for cell in row] for row in rows]
    holding = [index for index, row in enumerate(kinds) if "number" in row]
    if not holding:
        return None
    width = Counter(len(rows[index]) for index in holding).most_common(1)[0][0]
    regular = [index for index in holding if len(rows[index]) == width]
    cells = [kind for index in regular for kind in kinds[index] if kind != "missing"]
    good = sum(kind != "text" for kind in cells)
    filled = max(len(trimmed(rows[index])) for index in regular)
    column_kinds = _column_kinds([kinds[index] for index in regular], filled)
    if "number" not in column_kinds:
        return None
    quality = round(good / len(cells) * len(regular) / len(rows), 3)
    dialect = Dialect(separator=separator, decimal=decimal, kinds=column_kinds)
    fits = regular[0] > 0 and len(trimmed(rows[regular[0] - 1])) == dialect.width
    return (quality, fits, dialect.width), dialect


def _column_kinds(rows: Sequence[Sequence[Cell]], width: int) -> tuple[Cell, ...]:
    kinds: list[Cell] = []
    for column in range(width):
        counts = Counter(row[column] for row in rows if row[column] != "missing")
        kinds.append(counts.most_common(1)[0][0] if counts else "missing")
    return tuple(kinds)


def _comma_elsewhere(lines: Sequence[str], dialect: Dialect) -> bool:
    """Whether whole numbers in the sample left the sign open and a row elsewhere has a decimal comma."""
    if dialect.separator == ",":
        return False
    rows = [line for line in lines if "," in line and "." not in line]
    pointed = sum("." in line for line in lines)
    commas = Dialect(separator=dialect.separator, decimal=",", kinds=dialect.kinds)
    return pointed < len(rows) and sum(commas.starts_data(line) for line in rows) > max(1, len(rows) // 2)
