"""Which samples does a log give the run: the voltage and the angle, in the rig's units, on the log's clock?

Rows without a time are left out of both, rows without a voltage out of the input; an angle that could
not be read stays as NaN. A stream with fewer than `LEAST_SAMPLES` readable samples, or one that never
changes, is a fault.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.capture.logs.angle_unit import angle_in_rig_unit
from freqid.capture.logs.columns import ChosenColumn, Role, choose_column, find_column
from freqid.capture.logs.import_settings import ImportSettings, RigFacts
from freqid.capture.logs.input_hold import decide_hold
from freqid.capture.logs.log_table import LogColumn, LogTable
from freqid.capture.logs.periodicity import find_periodicity
from freqid.capture.logs.time_axis import TimeSettings, counts_frames, read_time, runs_like_time
from freqid.capture.logs.units import VOLTAGE_UNITS
from freqid.errors import LogError
from freqid.quantity import in_unit
from freqid.records import AngleStream, Hold, InputStream, Periodicity

__all__ = ["LEAST_SAMPLES", "LogSeries", "angle_stream", "input_stream", "read_series"]

LEAST_SAMPLES = 20
SAME_RATE = 0.1  # relative: a log farther off the sensor's nominal rate comes from another sensor


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LogSeries:
    """The columns of a log that serve the run, and its times (N,) in s, NaN where a row has none."""

    table: LogTable
    columns: Mapping[Role, LogColumn]
    time: NDArray[np.float64] = in_unit("s")
    has_times: bool
    notes: tuple[str, ...]


def read_series(
    table: LogTable, requests: Mapping[Role, str | None], *, time_request: str | None, settings: TimeSettings
) -> LogSeries:
    """Choose the time column and one column for each role of `requests`, and read the times.

    Raises
    ------
    LogError
        A column cannot be told apart, columns differ in length, or the times cannot be read.
    """
    time = _time_column(table, time_request, settings)
    taken = [] if time is None else [time.column.number]
    chosen: dict[Role, LogColumn] = {}
    notes = [*table.notes] + ([] if time is None else [time.note])
    asked_first: Sequence[Role] = sorted(requests, key=lambda role: requests[role] is None)
    for role in asked_first:
        found = choose_column(table, role, request=requests[role], taken=taken)
        chosen[role] = found.column
        taken.append(found.column.number)
        notes.append(found.note)
    lengths = {table.numbers(column).size for column in chosen.values()}
    axis = read_time(table, None if time is None else time.column, n_rows=min(lengths), settings=settings)
    if lengths != {axis.time.size}:
        raise LogError(f"{table.source}: the chosen columns differ in length; choose columns of one length")
    notes += axis.notes
    return LogSeries(table=table, columns=chosen, time=axis.time, has_times=time is not None, notes=tuple(notes))


def input_stream(series: LogSeries, *, settings: ImportSettings, rig: RigFacts) -> tuple[InputStream, tuple[str, ...]]:
    """The measured voltage with its hold and, for a response run, its periodicity, and what was done.

    Raises
    ------
    LogError
        Too few samples, or a constant voltage.
    """
    source, column = series.table.source, series.columns["input"]
    voltage, notes = _in_volts(series.table, column, rig)
    stamped = np.isfinite(series.time)
    usable = stamped & np.isfinite(voltage)
    if left_out := int(stamped.sum() - usable.sum()):
        notes.append(f"{source}: {left_out} rows without an input were left out of the input")
    time, voltage = series.time[usable], voltage[usable]
    _refuse_useless(voltage, f'{source}: input column "{column.name}"', "record the voltage that drives the rig")
    hold, why = _hold(time, voltage, settings, rig)
    notes.append(f"{source}: {why}")
    periodicity = find_periodicity(time, voltage) if settings.kind == "response" else None
    if periodicity is not None:
        notes.append(f"{source}: {_told(periodicity)}")
    stream = InputStream(
        time=_read_only(time), voltage=_read_only(voltage), hold=hold, commanded=False, periodicity=periodicity
    )
    return stream, tuple(notes)


def angle_stream(series: LogSeries, *, settings: ImportSettings, rig: RigFacts) -> tuple[AngleStream, tuple[str, ...]]:
    """The angle in the rig's unit, wraps undone, and what was done.

    Raises
    ------
    LogError
        No or too few readable samples, a constant angle, or an unknown unit.
    """
    source, column = series.table.source, series.columns["angle"]
    stamped = np.isfinite(series.time)
    raw = series.table.numbers(column)[stamped]
    _refuse_useless(raw, f'{source}: angle column "{column.name}"', "check the sensor and --angle-column")
    notes: list[str] = []
    if series.table.form == "wav":
        raw = raw * rig.angle_full_scale
        notes.append(f"{source}: digital full scale is {rig.angle_full_scale:g} {rig.angle_unit}, from the rig sheet")
    converted = angle_in_rig_unit(raw, column, asked_unit=settings.angle_unit, rig_unit=rig.angle_unit, source=source)
    time = series.time[stamped]
    exposure, why = _exposure(time, settings, rig)
    if why:
        notes.append(f"{source}: {why}")
    stream = AngleStream(
        time=_read_only(time),
        angle=converted.angle,
        angle_unit=rig.angle_unit,
        exposure=exposure,
        stamp=rig.stamp,
    )
    return stream, (*notes, *converted.notes)


def _exposure(time: NDArray[np.float64], settings: ImportSettings, rig: RigFacts) -> tuple[float, str]:
    """Exposure of the angle samples: as asked, or the rig sheet's where the log is at the rate of its sensor."""
    if settings.exposure is not None:
        return settings.exposure, f"exposure {settings.exposure:g} s, as asked"
    steps = np.diff(time)
    rate = 1 / float(np.median(steps[steps > 0])) if np.any(steps > 0) else rig.angle_sample_rate
    if rig.exposure == 0 or abs(rate / rig.angle_sample_rate - 1) <= SAME_RATE:
        return rig.exposure, ""
    return 0.0, (
        f"logged at {rate:.4g} Hz, not at the {rig.angle_sample_rate:g} Hz of [angle_sensor]: taken as readings of an "
        f"instant, "
        f"its exposure of {rig.exposure:g} s left aside; give --exposure where the log averages"
    )


def _time_column(table: LogTable, request: str | None, settings: TimeSettings) -> ChosenColumn | None:
    """The time column; None where the log has none and its rate is known."""
    if request is not None:
        return choose_column(table, "time", request=request)
    asked = settings.sample_rate is not None
    found = find_column(table, "time", frames=asked)
    if found is not None or table.sample_rate is not None:
        return found
    return _time_without_name(table, asked=asked)


def _time_without_name(table: LogTable, *, asked: bool) -> ChosenColumn | None:
    """What serves as time where no header says so: rows at the rate asked for, if nothing runs like a time."""
    counting = [column for column in table.columns if column.numbers is not None and counts_frames(column.numbers)]
    running = [column for column in table.columns if column.numbers is not None and runs_like_time(column.numbers)]
    if asked and running:
        raise LogError(
            f'{table.source}: column {running[0].number} "{running[0].name}" runs like a time although '
            f"--sample-rate is given; say which column is the time with --time-column: {table.listing()}"
        )
    if asked:
        return None
    if len(table.columns) == 1:
        raise LogError(f"{table.source}: one column and no times; give --sample-rate: {table.listing()}")
    hint = "give --sample-rate where the log has no times"
    if len(counting) == 1:
        hint = f'"{counting[0].name}" seems to count frames: give --sample-rate with the frame rate in Hz'
    try:
        return choose_column(table, "time", request=None)
    except LogError as fault:
        raise LogError(f"{fault} ({hint})") from fault


def _in_volts(table: LogTable, column: LogColumn, rig: RigFacts) -> tuple[NDArray[np.float64], list[str]]:
    numbers = table.numbers(column)
    if table.form == "wav":
        return numbers * rig.output_full_scale, [
            f"{table.source}: digital full scale is {rig.output_full_scale:g} V, from the rig sheet"
        ]
    if column.unit in (None, "V"):
        return numbers, []
    if column.unit in VOLTAGE_UNITS:
        return numbers * VOLTAGE_UNITS[column.unit], [f"{table.source}: input converted from {column.unit} to V"]
    return numbers, [f'{table.source}: the input is in "{column.unit}", no voltage; its numbers stand for V']


def _hold(
    time: NDArray[np.float64], voltage: NDArray[np.float64], settings: ImportSettings, rig: RigFacts
) -> tuple[Hold, str]:
    if settings.hold is not None:
        return settings.hold, f"input {settings.hold} between samples, as asked"
    decision = decide_hold(time, voltage, output_rate=rig.output_sample_rate, output_hold=rig.output_hold)
    return decision.hold, decision.note


def _refuse_useless(values: NDArray[np.float64], what: str, remedy: str) -> None:
    readable = values[np.isfinite(values)]
    if values.size and readable.size == 0:
        raise LogError(f"{what} holds no number in {values.size} rows; {remedy}")
    if readable.size < LEAST_SAMPLES:
        raise LogError(f"{what} has {readable.size} samples: at least {LEAST_SAMPLES} are needed; {remedy}")
    if np.ptp(readable) == 0:
        raise LogError(f"{what} is constant at {readable[0]:g} in all {readable.size} samples; {remedy}")


def _told(periodicity: Periodicity) -> str:
    count, lines = periodicity.n_periods, periodicity.lines
    whole = "one period" if count == 1 else f"{count} periods"
    return (
        f"input is {whole} of {periodicity.period:.6g} s with {lines.size} lines from {lines[0]:.4g} to "
        f"{lines[-1]:.4g} Hz"
    )


def _read_only(values: NDArray[np.float64]) -> NDArray[np.float64]:
    values.flags.writeable = False
    return values
