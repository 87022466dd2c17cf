"""Which column is the time, which the input, which the angle?

A column asked for is found by its header (exact, then whatever the case, then by whole words or a
beginning that only one column has) or by its number, counted from 1. A column not asked for is taken only
where one column alone can be meant: by its name, by the words in its name, by its unit, or because it
is the only one left. Otherwise the error lists the columns and names the option to give.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Literal

from freqid.capture.logs.log_table import LogColumn, LogTable
from freqid.capture.logs.units import ANGLE_UNITS, TIME_UNITS, VOLTAGE_UNITS, bare_name
from freqid.errors import LogError

__all__ = ["ChosenColumn", "Role", "choose_column", "find_column", "requested_column"]

Role = Literal["time", "input", "angle"]

_TIME_NAMES = (
    "time,t,zeit,timestamp,time stamp,stamp,zeitstempel,datetime,date time,clock,zeitpunkt,uhrzeit,elapsed time"
)
_INPUT_NAMES = "u,input,voltage,volt,volts,spannung,drive,excitation,eingang,vin,v in,u in,command"
_ANGLE_NAMES = "y,angle,winkel,position,pos,deflection,auslenkung,theta,phi,output,ausgang"
_NAMES: Mapping[Role, frozenset[str]] = MappingProxyType(
    {
        "time": frozenset(_TIME_NAMES.split(",")),
        "input": frozenset(_INPUT_NAMES.split(",")),
        "angle": frozenset(_ANGLE_NAMES.split(",")),
    }
)
_FRAME_NAMES = frozenset(["frame", "frames", "frame number", "frame no", "bild", "bildnummer", "sample", "index", "n"])
_UNITS: Mapping[Role, Collection[str]] = MappingProxyType(
    {"time": TIME_UNITS, "input": VOLTAGE_UNITS, "angle": ANGLE_UNITS}
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ChosenColumn:
    """A column and, in a sentence, why it was taken."""

    column: LogColumn
    note: str


def choose_column(
    table: LogTable, role: Role, *, request: str | None, taken: Collection[int] = (), frames: bool = False
) -> ChosenColumn:
    """The column for `role`: the one asked for, else the only one that can be meant.

    Parameters
    ----------
    table : LogTable
        The log.
    role : {"time", "input", "angle"}
        What is wanted.
    request : str or None
        A header name or a number counted from 1; None to decide from the log.
    taken : collection of int
        Numbers of columns that serve another role already.
    frames : bool
        Whether a column of frame numbers may be the time (the sample rate is known).

    Raises
    ------
    LogError
        No column, or more than one, can be meant; the message lists them all.
    """
    if request is not None:
        column = requested_column(table, request, role)
        if column.number in taken:
            raise LogError(
                f'{table.source}: column {column.number} "{column.name}" is asked for as {role} and serves as another '
                f"stream already; choose a different --{role}-column: {table.listing()}"
            )
        return ChosenColumn(column=column, note=f'{table.source}: {role} from column "{column.name}", as asked')
    if found := find_column(table, role, taken=taken, frames=frames):
        return found
    raise LogError(
        f"{table.source}: which column is the {role}? Give --{role}-column NAME or NUMBER, one of: {table.listing()}"
    )


def requested_column(table: LogTable, request: str, role: Role) -> LogColumn:
    """The column that `request`, a header name or a number counted from 1, means.

    Raises
    ------
    LogError
        No column, or more than one, is meant.
    """
    wanted = request.strip()
    folded = wanted.casefold()
    tiers: tuple[Callable[[LogColumn], bool], ...] = (
        lambda column: column.name == wanted,
        lambda column: column.name.casefold() == folded,
        lambda column: wanted.isdecimal() and column.number == int(wanted),
        lambda column: bare_name(column.name) == folded,
        lambda column: set(_words(folded)) <= set(_words(column.name)) and bool(_words(folded)),
        lambda column: column.name.casefold().startswith(folded) and bool(folded),
    )
    for fits in tiers:
        found = [column for column in table.columns if fits(column)]
        if len(found) == 1:
            return found[0]
        if found:
            names = " and ".join(str(column.number) for column in found)
            raise LogError(
                f'{table.source}: --{role}-column "{request}" fits columns {names}; give the number: {table.listing()}'
            )
    raise LogError(
        f'{table.source}: no column "{request}" for the {role}; give --{role}-column one of: {table.listing()}'
    )


def find_column(
    table: LogTable, role: Role, *, taken: Collection[int] = (), frames: bool = False
) -> ChosenColumn | None:
    """The only column that can be meant by `role`, or None."""
    free = [column for column in table.columns if column.number not in taken]
    if role != "time":
        free = [column for column in free if column.numbers is not None or column.fault]
    names = _NAMES[role] | (_FRAME_NAMES if frames and role == "time" else frozenset())
    long_names = {name for name in names if len(name) > 2}
    reasons: tuple[tuple[str, Callable[[LogColumn], bool]], ...] = (
        ("by its name", lambda column: _spoken(column) in names),
        ("by a word in its name", lambda column: bool(long_names & set(_words(column.name)))),
        ("by its unit", lambda column: column.unit in _UNITS[role]),
    )
    for reason, fits in reasons:
        found = [column for column in free if fits(column)]
        if len(found) == 1:
            return _chosen(table, role, found[0], reason)
        if found:
            return None
    if role != "time" and len(free) == 1 and not _serves_another(free[0], role):
        return _chosen(table, role, free[0], "the only column left")
    return None


def _chosen(table: LogTable, role: Role, column: LogColumn, reason: str) -> ChosenColumn:
    return ChosenColumn(column=column, note=f'{table.source}: {role} from column "{column.name}" ({reason})')


def _serves_another(column: LogColumn, role: Role) -> bool:
    """Whether the column's name or unit says that it is something else."""
    others: Sequence[Role] = [other for other in _NAMES if other != role]
    return any(_spoken(column) in _NAMES[other] or column.unit in _UNITS[other] for other in others)


def _spoken(column: LogColumn) -> str:
    return " ".join(_words(bare_name(column.name)))


def _words(text: str) -> list[str]:
    return re.findall(r"[^\W_]+", text.casefold())
