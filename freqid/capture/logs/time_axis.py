"""When was each sample taken, on the clock of the log itself?

Times in s, ms, us or min become seconds and otherwise stay as they came. ISO 8601 date-times become
seconds from the first sample, clock times seconds since midnight, frame numbers n become n / sample rate, and
a log without times gets row / sample rate. Repeated stamps stay (rounded stamps repeat); stamps that
run backwards are a fault.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.capture.logs.log_table import LogColumn, LogTable
from freqid.capture.logs.time_stamps import read_stamps
from freqid.capture.logs.units import TIME_UNITS, canonical_unit
from freqid.errors import LogError
from freqid.quantity import in_unit

__all__ = ["TimeAxis", "TimeSettings", "counts_frames", "read_time", "runs_like_time"]

_MOSTLY = 0.8  # of the steps: lost frames and jitter spoil the rest
_DAY = 86400.0  # s
_SAME_DECADE = 0.15  # in log10: a step within a factor of 1.4 of the nominal one is that one


@dataclass(frozen=True, slots=True, kw_only=True)
class TimeSettings:
    """How to read the times: the user's unit and rate (None: from the log), and the nominal rates in Hz
    of what the log may hold (the sensor's, the output converter's)."""

    unit: str | None = None
    sample_rate: float | None = None
    nominal_rates: tuple[float, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TimeAxis:
    """Stamps (N,) in s, NaN where a row has none, and what was found, in sentences."""

    time: NDArray[np.float64] = in_unit("s")
    notes: tuple[str, ...]


def read_time(table: LogTable, column: LogColumn | None, *, n_rows: int, settings: TimeSettings) -> TimeAxis:
    """The time axis of `table` from its time column, or from the sample rate where it has none.

    Parameters
    ----------
    table : LogTable
        The log.
    column : LogColumn or None
        Its time column; None for a log without times.
    n_rows : int
        Rows of a log without times.
    settings : TimeSettings
        Unit, sample rate, and the nominal rate the unit is checked against.

    Raises
    ------
    LogError
        No times and no sample rate, an unknown unit, stamps that are no times or run backwards, or
        times that look like the wrong unit.
    """
    if column is None:
        return _counted(table, n_rows, settings.sample_rate)
    if column.numbers is None and column.fault is None:
        stamps = read_stamps(table, column)
        return _checked(table, column, stamps.seconds, [f"{table.source}: {stamps.note}"])
    numbers = table.numbers(column)
    if settings.sample_rate is not None and counts_frames(numbers) and column.unit not in TIME_UNITS:
        note = f'{table.source}: "{column.name}" holds frame numbers; time = number / {settings.sample_rate:g} Hz'
        return _checked(table, column, numbers / settings.sample_rate, [note])
    unit, why = _unit(table, column, settings.unit)
    time = numbers * TIME_UNITS[unit]
    notes = [f"{table.source}: times in {unit} ({why})"]
    if settings.sample_rate is not None:
        notes.append(f"{table.source}: has times; the sample rate {settings.sample_rate:g} Hz only checks their unit")
    axis = _checked(table, column, time, notes)
    rates = (*(() if settings.sample_rate is None else (settings.sample_rate,)), *settings.nominal_rates)
    doubt = _wrong_unit(numbers, unit, rates, stated=settings.unit is not None or column.unit is not None)
    if doubt and settings.unit is None:
        raise LogError(f"{table.source}: {doubt}; give --time-unit s, ms, us or min, or correct the rate in rig.toml")
    if doubt:
        return TimeAxis(time=axis.time, notes=(*axis.notes, f"{table.source}: {doubt}; kept, as --time-unit says"))
    return axis


def counts_frames(numbers: NDArray[np.float64]) -> bool:
    """Whole numbers that never fall and mostly step by one (lost frames leave gaps)."""
    known = numbers[np.isfinite(numbers)]
    steps = np.diff(known)
    whole = bool(np.all(known == np.round(known)))
    return whole and steps.size > 0 and bool(np.all(steps >= 0)) and float(np.median(steps)) == 1.0


def runs_like_time(numbers: NDArray[np.float64]) -> bool:
    """Numbers that never fall and mostly go on by about the same step, as stamps do."""
    steps = np.diff(numbers[np.isfinite(numbers)])
    if steps.size < 3 or np.any(steps < 0):
        return False
    usual = float(np.median(steps))
    return usual > 0 and float(np.mean(np.abs(steps / usual - 1) < 0.5)) > _MOSTLY


def _counted(table: LogTable, n_rows: int, asked: float | None) -> TimeAxis:
    rate = asked or table.sample_rate
    if rate is None:
        raise LogError(f"{table.source}: no time column; give --time-column or --sample-rate: {table.listing()}")
    note = f"{table.source}: no times in it; time = sample / {rate:g} Hz"
    if table.sample_rate and asked and not math.isclose(asked, table.sample_rate):
        note += f" as asked (the file states {table.sample_rate:g} Hz)"
    return TimeAxis(time=np.arange(n_rows) / rate, notes=(note,))


def _unit(table: LogTable, column: LogColumn, asked: str | None) -> tuple[str, str]:
    if asked is not None:
        unit = canonical_unit(asked)
        if unit is None or unit not in TIME_UNITS:
            raise LogError(f'--time-unit "{asked}" is no unit of time; give s, ms, us or min')
        return unit, "as asked"
    if column.unit in TIME_UNITS:
        return str(column.unit), "from the header"
    if column.unit is not None:
        raise LogError(
            f'{table.source}: the time column "{column.name}" is in "{column.unit}"; give --time-unit s, ms, us or min'
        )
    return "s", "no unit in the header"


def _checked(table: LogTable, column: LogColumn, time: NDArray[np.float64], notes: list[str]) -> TimeAxis:
    """Refuse stamps that run backwards, count those that repeat or are missing."""
    known = np.flatnonzero(np.isfinite(time))
    if known.size == 0:
        raise LogError(f'{table.source}: the time column "{column.name}" holds no times; choose --time-column')
    steps = np.diff(time[known])
    if steps.size and steps.min() < 0:
        raise LogError(_backwards(table, column, known, int(np.flatnonzero(steps < 0)[0]), steps))
    if repeated := int((steps == 0).sum()):
        notes.append(f"{table.source}: {repeated} stamps repeat the one before; kept")
    if missing := time.size - known.size:
        notes.append(f"{table.source}: {missing} rows without a time were left out")
    axis = np.array(time)
    axis.flags.writeable = False
    return TimeAxis(time=axis, notes=tuple(notes))


def _backwards(
    table: LogTable, column: LogColumn, known: NDArray[np.intp], step: int, steps: NDArray[np.float64]
) -> str:
    before, after = (_as_written(column, int(known[step + offset])) for offset in (0, 1))
    place = f"{table.source}: {table.where(int(known[step + 1]))}"
    if abs(steps[step] + _DAY) < 0.1 * _DAY:
        return f"{place}: the time passes midnight ({before} to {after}); cut the log there or log times that go on"
    return f"{place}: the time runs backwards from {before} to {after}; correct the stamps or cut the log there"


def _as_written(column: LogColumn, row: int) -> str:
    if column.numbers is not None:
        return f"{column.numbers[row]:.15g}"
    return column.text[row] if column.text else "nothing"


def _wrong_unit(numbers: NDArray[np.float64], unit: str, rates: tuple[float, ...], *, stated: bool) -> str | None:
    """A sentence where another unit of time, but not this one, would bring the step to a nominal one."""
    known = numbers[np.isfinite(numbers)]
    if not rates or known.size < 3 or known[-1] <= known[0]:
        return None
    step = float(np.median(np.diff(known))) or float((known[-1] - known[0]) / (known.size - 1))
    doubt = f"the step between stamps is {step:g}, taken as {unit}, but the nominal rate is "
    if any(_same(step * TIME_UNITS[unit] * rate) for rate in rates):
        return None
    if not stated and counts_frames(numbers):
        return doubt + f"{rates[0]:g} Hz (if these are frame numbers, give --sample-rate)"
    for rate in rates:
        if any(_same(step * TIME_UNITS[other] * rate) for other in ("s", "ms", "us") if other != unit):
            return doubt + f"{rate:g} Hz"
    return None


def _same(ratio: float) -> bool:
    return abs(math.log10(ratio)) < _SAME_DECADE
