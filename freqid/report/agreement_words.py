"""How does the agreement strip look on a terminal? One row a quantity, plain characters.

The axis is in units of each quantity's tolerance, about the common mean of both tests; the bars are 95 % intervals.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from freqid.crosscheck.comparison_result import CrossCheck
from freqid.report.agreement_scale import Bar, ScaledRow, half_span, scaled_rows
from freqid.report.quantity_words import UNDETERMINED

__all__ = ["agreement_text"]

_SMALLEST_AXIS = 21
_GAP = "  "


@dataclass(frozen=True, slots=True, kw_only=True)
class _Characters:
    frequency_mark: str
    step_mark: str
    both_marks: str
    frequency_bar: str
    step_bar: str
    both_bars: str
    limit: str
    crossed: str
    inside: str
    left: str
    right: str


_PLAIN = _Characters(
    frequency_mark="o", step_mark="x", both_marks="@", frequency_bar="=", step_bar="-", both_bars="#",
    limit="|", crossed="+", inside=".", left="<", right=">",
)  # fmt: skip
_DRAWN = _Characters(
    frequency_mark="●", step_mark="◆", both_marks="◈", frequency_bar="━", step_bar="─", both_bars="═",
    limit="│", crossed="┼", inside="·", left="‹", right="›",
)  # fmt: skip


def agreement_text(crosscheck: CrossCheck, width: int = 80, *, ascii: bool = False) -> str:
    """The agreement strip as lines of at most `width` characters (at least about 50), without a final line feed.

    One row per quantity that has a tolerance: name, both 95 % intervals about their common mean with the tolerance
    marked at -1 and +1, verdict. An interval that leaves the axis ends in an arrow. `ascii` keeps to ASCII, for
    terminals without UTF-8. A comparison without tolerances gives one sentence.
    """
    rows = scaled_rows(crosscheck)
    if not rows:
        return "no quantity has a tolerance: nothing is judged"
    letters = _PLAIN if ascii else _DRAWN
    names = [_plain(row.label) if ascii else row.label for row in rows]
    name_width = max(len(name) for name in names)
    verdict_width = max(len(row.verdict) for row in rows)
    cells = max(width - name_width - verdict_width - 2 * len(_GAP), _SMALLEST_AXIS)
    cells -= 1 - cells % 2  # odd, so that the mean has a cell of its own
    scale = _Axis(half_span=half_span(rows), cells=cells)
    lines = [
        f"{name:<{name_width}}{_GAP}{_strip(row, scale, letters)}{_GAP}{row.verdict}"
        for name, row in zip(names, rows, strict=True)
    ]
    margin = " " * (name_width + len(_GAP))
    return "\n".join([*_key(letters, crosscheck.labels), *lines, margin + _ticks(scale)])


@dataclass(frozen=True, slots=True, kw_only=True)
class _Axis:
    half_span: float
    cells: int

    def cell(self, tolerances: float) -> int:
        """Number of the cell, beyond 0 and cells - 1 for what is off the axis."""
        return round((tolerances / self.half_span + 1) / 2 * (self.cells - 1))


def _strip(row: ScaledRow, axis: _Axis, letters: _Characters) -> str:
    low, high = axis.cell(-1), axis.cell(1)
    strip = [letters.inside if low < n < high else " " for n in range(axis.cells)]
    strip[low] = strip[high] = letters.limit
    first, second = _covered(row.frequency_test, axis), _covered(row.step_test, axis)
    for n in first | second:
        one, other = n in first, n in second
        strip[n] = letters.both_bars if one and other else letters.frequency_bar if one else letters.step_bar
        if n in (low, high):
            strip[n] = letters.crossed
    _mark(strip, row, axis, letters)
    for bar in (row.frequency_test, row.step_test):
        if bar is not None and axis.cell(bar.low) < 0:
            strip[0] = letters.left
        if bar is not None and axis.cell(bar.high) >= axis.cells:
            strip[-1] = letters.right
    return "".join(strip) if row.difference is not None else _with_word(strip, UNDETERMINED)


def _covered(bar: Bar | None, axis: _Axis) -> set[int]:
    if bar is None:
        return set()
    return set(range(max(axis.cell(bar.low), 0), min(axis.cell(bar.high), axis.cells - 1) + 1))


def _mark(strip: list[str], row: ScaledRow, axis: _Axis, letters: _Characters) -> None:
    places = [
        (axis.cell(bar.value), mark)
        for bar, mark in ((row.frequency_test, letters.frequency_mark), (row.step_test, letters.step_mark))
        if bar is not None
    ]
    for place, mark in places:
        if 0 <= place < axis.cells:
            strip[place] = mark
    if len(places) == 2 and places[0][0] == places[1][0] and 0 <= places[0][0] < axis.cells:
        strip[places[0][0]] = letters.both_marks


def _with_word(strip: Sequence[str], word: str) -> str:
    return f"{word:^{len(strip)}}"


def _ticks(axis: _Axis) -> str:
    line = [" "] * axis.cells
    for tick, text in ((-1, "-1"), (0, "0"), (1, "+1")):
        begin = axis.cell(tick) - (len(text) - 1)
        line[max(begin, 0) : max(begin, 0) + len(text)] = text
    return "".join(line).rstrip() + " tolerance"


def _key(letters: _Characters, labels: tuple[str, str]) -> list[str]:
    return [
        f"{letters.frequency_bar}{letters.frequency_mark}{letters.frequency_bar} {labels[0]}   "
        f"{letters.step_bar}{letters.step_mark}{letters.step_bar} {labels[1]}   {letters.both_bars} both"
    ]


def _plain(text: str) -> str:
    return text.replace("–", "-").encode("ascii", "replace").decode("ascii")
