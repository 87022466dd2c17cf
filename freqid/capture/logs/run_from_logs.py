"""How do logs made elsewhere become a run?

One log with both columns shares one clock; two logs, or a designed profile and an angle log, do not.
Nothing is shifted or resampled here. Whatever was chosen, converted or left out is told in the run's notes.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from freqid.capture.logs.columns import Role, find_column, requested_column
from freqid.capture.logs.import_settings import ImportSettings, RigFacts
from freqid.capture.logs.log_file import open_log
from freqid.capture.logs.log_table import LogTable
from freqid.capture.logs.streams import LogSeries, angle_stream, input_stream, read_series
from freqid.capture.logs.time_axis import TimeSettings
from freqid.errors import LogError
from freqid.records import AngleStream, InputStream, Origin, Periodicity, Run

if TYPE_CHECKING:
    from excitation.profile import Profile

__all__ = ["run_from_one_log", "run_from_profile", "run_from_two_logs"]


def run_from_one_log(path: Path, *, settings: ImportSettings, rig: RigFacts) -> Run:
    """A run from one log that holds the input and the angle, on one clock.

    Parameters
    ----------
    path : Path
        Delimited text, WAV or HDF5.
    settings : ImportSettings
        The user's choices.
    rig : RigFacts
        The facts of the rig sheet.

    Raises
    ------
    LogError
        The log cannot be read, its columns cannot be told apart, or it holds no usable run.
    """
    table = open_log(path, decimal=settings.decimal)
    series = read_series(
        table,
        {"input": settings.input_column, "angle": settings.angle_column},
        time_request=settings.time_column,
        settings=TimeSettings(
            unit=settings.time_unit,
            sample_rate=settings.sample_rate,
            nominal_rates=(rig.angle_sample_rate, rig.output_sample_rate),
        ),
    )
    voltage, input_notes = input_stream(series, settings=settings, rig=rig)
    angle, angle_notes = angle_stream(series, settings=settings, rig=rig)
    _check_overlap(voltage, angle, table.source)
    return Run(
        name=path.stem,
        kind=settings.kind,
        input=voltage,
        angle=angle,
        common_clock=True,
        origins=(_origin(series),),
        notes=(*series.notes, *input_notes, *angle_notes),
    )


def run_from_two_logs(input_path: Path, angle_path: Path, *, settings: ImportSettings, rig: RigFacts) -> Run:
    """A run from a log of the voltage and a log of the angle, each on its own clock.

    `time_column`, `time_unit` and `sample_rate` hold for both logs unless the `input_...` choice is given. A time
    column the input log does not have is no fault there. Where neither log has times, `sample_rate` is the angle's.

    Raises
    ------
    LogError
        As in `run_from_one_log`.
    """
    angle_series = _angle_series(angle_path, settings, rig)
    angle, angle_notes = angle_stream(angle_series, settings=settings, rig=rig)
    input_series = _input_series(input_path, settings, rig, rate_taken=not angle_series.has_times)
    voltage, input_notes = input_stream(input_series, settings=settings, rig=rig)
    return Run(
        name=angle_path.stem,
        kind=settings.kind,
        input=voltage,
        angle=angle,
        common_clock=False,
        origins=(_origin(input_series), _origin(angle_series)),
        notes=(*input_series.notes, *input_notes, *angle_series.notes, *angle_notes),
    )


def run_from_profile(
    profile: Profile, angle_path: Path, *, settings: ImportSettings, rig: RigFacts, profile_sha256: str | None
) -> Run:
    """A run from the profile that was sent and a log of the angle.

    Parameters
    ----------
    profile : excitation.Profile
        The designed voltage; the input is taken to be exactly this.
    angle_path : Path
        The log of the angle.
    settings, rig
        As in `run_from_one_log`; columns and units concern the angle log alone.
    profile_sha256 : str or None
        Hash of the profile's file.

    Raises
    ------
    LogError
        As in `run_from_one_log`.
    """
    series = _angle_series(angle_path, settings, rig)
    angle, notes = angle_stream(series, settings=settings, rig=rig)
    designed = Origin(source="profile", sha256=profile_sha256, content=f"input, the designed {profile.kind}")
    return Run(
        name=angle_path.stem,
        kind=settings.kind,
        input=_designed_stream(profile),
        angle=angle,
        common_clock=False,
        origins=(designed, _origin(series)),
        notes=("input from the designed profile, not measured", *series.notes, *notes),
    )


def _angle_series(path: Path, settings: ImportSettings, rig: RigFacts) -> LogSeries:
    times = TimeSettings(
        unit=settings.time_unit, sample_rate=settings.sample_rate, nominal_rates=(rig.angle_sample_rate,)
    )
    return read_series(
        open_log(path, decimal=settings.decimal),
        {"angle": settings.angle_column},
        time_request=settings.time_column,
        settings=times,
    )


def _input_series(path: Path, settings: ImportSettings, rig: RigFacts, *, rate_taken: bool) -> LogSeries:
    """The input log; the rig's output rate serves where it has no times and the rate asked for is the angle's."""
    table = open_log(path, decimal=settings.decimal)
    request = settings.input_time_column or _if_present(table, settings.time_column)
    rate = settings.input_sample_rate or settings.sample_rate
    if settings.input_sample_rate is None and (rate_taken or rate is None):
        rate = _fallback_rate(table, request, rig)
    times = TimeSettings(
        unit=settings.input_time_unit or settings.time_unit, sample_rate=rate, nominal_rates=(rig.output_sample_rate,)
    )
    return read_series(table, {"input": settings.input_column}, time_request=request, settings=times)


def _fallback_rate(table: LogTable, request: str | None, rig: RigFacts) -> float | None:
    """The output's rate for an input log without times and without a rate of its own."""
    has_times = request is not None or find_column(table, "time") is not None
    return None if has_times or table.sample_rate is not None or len(table.columns) > 1 else rig.output_sample_rate


def _if_present(table: LogTable, request: str | None) -> str | None:
    """The request, where the table has such a column."""
    if request is None:
        return None
    try:
        requested_column(table, request, "time")
    except LogError:
        return None
    return request


def _designed_stream(profile: Profile) -> InputStream:
    periodicity = None
    if profile.period_samples and profile.steady_stop > profile.steady_start:
        periodicity = Periodicity(
            period=profile.period_samples / profile.sample_rate,
            lines=profile.lines,
            start=profile.steady_start / profile.sample_rate,
            stop=profile.steady_stop / profile.sample_rate,
        )
    time = np.arange(len(profile.voltage)) / profile.sample_rate
    time.flags.writeable = False
    return InputStream(time=time, voltage=profile.voltage, hold=profile.hold, commanded=True, periodicity=periodicity)


def _origin(series: LogSeries) -> Origin:
    roles: tuple[Role, ...] = ("input", "angle")
    columns = [f'{role} "{series.columns[role].name}"' for role in roles if role in series.columns]
    return Origin(source=series.table.source, sha256=series.table.sha256, content=", ".join(columns))


def _check_overlap(voltage: InputStream, angle: AngleStream, source: str) -> None:
    """Refuse a log in which the readable angle and the input lie apart in time."""
    known = angle.time[np.isfinite(angle.angle)]
    first, last = max(known[0], voltage.time[0]), min(known[-1], voltage.time[-1])
    if first >= last:
        raise LogError(
            f"{source}: input ({voltage.time[0]:g} to {voltage.time[-1]:g} s) and angle ({known[0]:g} to "
            f"{known[-1]:g} s) do not overlap; log both at once, or import two logs with --input and --angle"
        )
