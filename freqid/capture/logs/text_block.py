"""How are many rows read quickly? All at once, where every cell of every line is a plain number.

Anything irregular (an empty cell, text, quotes, comments, a short row) makes this reading give up; the
careful one then reads cell by cell and says what is wrong where.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from freqid.capture.logs.text_cells import WHITE_SPACE
from freqid.capture.logs.text_dialect import Dialect

__all__ = ["regular_rows"]

_IRREGULAR = ('"', "#", "%", "/", "_")


def regular_rows(lines: Sequence[str], dialect: Dialect) -> NDArray[np.float64] | None:
    """The numbers (N, columns) in N lines; None where they are not all plain rows of `dialect`."""
    block = "\n".join(lines)
    separator = None if dialect.separator == WHITE_SPACE else dialect.separator
    if not block.isascii() or any(sign in block for sign in _IRREGULAR):
        return None
    if dialect.decimal == ",":
        if "." in block:
            return None
        block = block.replace(",", ".")
    rows = block.split("\n")
    if separator and rows[0].endswith(separator):
        rows = [row.removesuffix(separator) for row in rows]
    if not all(rows):
        return None
    try:
        numbers = np.loadtxt(rows, delimiter=separator, comments=None, ndmin=2)
    except ValueError:
        return None
    if numbers.shape != (len(rows), dialect.width):
        return None
    numbers[np.isinf(numbers)] = np.nan
    return numbers
