"""In which unit is the angle, and where does it jump by a whole turn that the rig did not make?

The unit is the user's, else the log's, else the rig sheet's; the angle is converted to the rig's. A
sensor that reports within one turn (0 to 360 degrees, or plus and minus 180) jumps by a turn at the
edge; such jumps are undone where the ordinary steps are much smaller.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.capture.logs.log_table import LogColumn
from freqid.capture.logs.units import ANGLE_UNITS, canonical_unit
from freqid.errors import LogError
from freqid.quantity import in_unit

__all__ = ["RigAngle", "angle_in_rig_unit", "without_wraps"]

_NEAR_A_TURN = 0.15  # a jump within this part of a turn of a whole turn is a wrap
_ORDINARY = 0.125  # turns; 99 % of the other steps must be below it
_ONE_TURN = 1.02  # turns; a sensor that wraps never reports more, rounding allowed for


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RigAngle:
    """The angle (N,) in the rig's unit, NaN where unread, and what was done, in sentences."""

    angle: NDArray[np.float64] = in_unit("angle_unit")
    notes: tuple[str, ...]


def angle_in_rig_unit(
    angle: NDArray[np.float64], column: LogColumn, *, asked_unit: str | None, rig_unit: str, source: str
) -> RigAngle:
    """Convert the angle (N,) of `column` to the rig's unit and undo wraps.

    Raises
    ------
    LogError
        `asked_unit` or the rig's unit is no unit of angle.
    """
    unit, why = _unit(column, asked_unit, rig_unit)
    whole_turn = 2 * math.pi / ANGLE_UNITS[unit]
    unwrapped, wraps = without_wraps(angle, whole_turn=whole_turn)
    notes = []
    if unit != rig_unit:
        unwrapped = unwrapped * (ANGLE_UNITS[unit] / ANGLE_UNITS[rig_unit])
        notes.append(f"{source}: angle converted from {unit} ({why}) to {rig_unit}")
    else:
        notes.append(f"{source}: angle in {unit} ({why})")
    if wraps:
        notes.append(f"{source}: {wraps} jumps of the angle by a whole turn undone")
    if unread := int(np.isnan(angle).sum()):
        notes.append(f"{source}: {unread} of {angle.size} samples hold no angle")
    unwrapped.flags.writeable = False
    return RigAngle(angle=unwrapped, notes=tuple(notes))


def without_wraps(angle: NDArray[np.float64], *, whole_turn: float) -> tuple[NDArray[np.float64], int]:
    """The angle (N,) without jumps by a whole turn, on the turn most samples are on, and the number of jumps.

    Nothing is changed where the angle covers more than a turn or its ordinary steps are not much smaller than one.
    """
    result = np.array(angle, dtype=np.float64)
    known = np.flatnonzero(np.isfinite(result))
    if known.size < 3:
        return result, 0
    steps = np.diff(result[known]) / whole_turn
    jumps = np.abs(np.abs(steps) - 1) < _NEAR_A_TURN
    ordinary = np.abs(steps[~jumps])
    covered = np.ptp(result[known]) / whole_turn
    if not jumps.any() or ordinary.size == 0 or covered > _ONE_TURN or np.quantile(ordinary, 0.99) > _ORDINARY:
        return result, 0
    turns = np.concatenate([[0], np.cumsum(-np.sign(steps) * jumps)])
    values, counts = np.unique(turns, return_counts=True)
    result[known] += (turns - values[np.argmax(counts)]) * whole_turn
    return result, int(jumps.sum())


def _unit(column: LogColumn, asked: str | None, rig_unit: str) -> tuple[str, str]:
    if rig_unit not in ANGLE_UNITS:
        raise LogError(f'rig.toml: [rig] angle_unit "{rig_unit}" is no unit of angle; write deg or rad')
    if asked is not None:
        unit = canonical_unit(asked)
        if unit is None or unit not in ANGLE_UNITS:
            raise LogError(f'--angle-unit "{asked}" is no unit of angle; give deg or rad')
        return unit, "as asked"
    if column.unit in ANGLE_UNITS:
        return str(column.unit), "from the header"
    other = f', the header says "{column.unit}"' if column.unit else ""
    return rig_unit, f"from the rig sheet{other}"
