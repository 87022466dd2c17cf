"""Where do two tests lie in units of what counts as agreement? The geometry behind the strip, drawn or in text.

Per quantity the origin is the common mean (half of the sum) of both values and the unit its tolerance; the difference
is counted from zero in the same unit. The tests agree where the interval of the *difference* lies within -1 to +1.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from freqid.crosscheck.comparison_result import ComparedRow, CrossCheck
from freqid.quantity import Quantity
from freqid.report.quantity_words import label_of

__all__ = ["Bar", "ScaledRow", "half_span", "scaled_rows"]

_NARROWEST, _WIDEST = 1.6, 4.0  # tolerances to either side


@dataclass(frozen=True, slots=True, kw_only=True)
class Bar:
    """A value with its 95 % interval, in tolerances."""

    low: float
    value: float
    high: float


@dataclass(frozen=True, slots=True, kw_only=True)
class ScaledRow:
    """One judged quantity in tolerances; a bar is None where its test left the quantity undetermined."""

    label: str
    frequency_test: Bar | None
    step_test: Bar | None
    difference: Bar | None
    verdict: str


def scaled_rows(crosscheck: CrossCheck) -> tuple[ScaledRow, ...]:
    """The quantities that have a tolerance, in the order of the comparison."""
    return tuple(_scaled(row, row.tolerance) for row in crosscheck.compared if row.tolerance)


def half_span(rows: Sequence[ScaledRow]) -> float:
    """How far the axis goes to either side, in tolerances: all bars where that is not too far."""
    bars = [bar for row in rows for bar in (row.frequency_test, row.step_test, row.difference) if bar is not None]
    reach = max((max(abs(bar.low), abs(bar.high)) for bar in bars), default=0.0)
    return min(max(1.08 * reach, _NARROWEST), _WIDEST)


def _scaled(row: ComparedRow, tolerance: float) -> ScaledRow:
    values = [q.value for q in (row.frequency_test, row.step_test) if q is not None]
    mean = sum(values) / len(values) if values else 0.0
    return ScaledRow(
        label=label_of(row.quantity),
        frequency_test=_bar(row.frequency_test, mean, tolerance),
        step_test=_bar(row.step_test, mean, tolerance),
        difference=_bar(row.difference, 0.0, tolerance),
        verdict=row.verdict,
    )


def _bar(quantity: Quantity | None, origin: float, tolerance: float) -> Bar | None:
    if quantity is None:
        return None
    low, high = ((end - origin) / tolerance for end in quantity.interval_95)
    return Bar(low=low, value=(quantity.value - origin) / tolerance, high=high)
