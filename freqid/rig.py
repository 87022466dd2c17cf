"""What is known of the rig before the test: what may it take, what moves it, what watches it?

Reads rig.toml into one frozen `Rig`, one attribute per table, every value checked against the rule its
field carries in `freqid.rig_tables`. Angles are in the rig's own `angle_unit`.
Source of the file format: TOML 1.0.0.
"""

from __future__ import annotations

import difflib
import math
import tomllib
from collections.abc import Mapping
from dataclasses import MISSING, Field, dataclass, fields, replace
from pathlib import Path
from typing import Any, Literal, TypeVar

from freqid.errors import RigSheetError
from freqid.rig_tables import (
    AngleSensor,
    Identity,
    KeyRule,
    Limits,
    Output,
    Range,
    Requirements,
    Simulated,
    StepTest,
    Tolerance,
)

__all__ = [
    "TABLES",
    "AngleSensor",
    "Identity",
    "Limits",
    "Output",
    "Requirements",
    "Rig",
    "Simulated",
    "StepTest",
    "Tolerance",
    "parse_rig",
    "read_rig",
]

Table = TypeVar("Table")


@dataclass(frozen=True, slots=True, kw_only=True)
class Rig:
    """The whole rig sheet, every value in range; one attribute per table."""

    rig: Identity
    limits: Limits
    output: Output
    angle_sensor: AngleSensor
    step_test: StepTest
    tolerance: Tolerance
    requirements: Requirements
    simulated: Simulated

    @property
    def name(self) -> str:
        """What the report calls the rig."""
        return self.rig.name

    @property
    def angle_unit(self) -> Literal["deg", "rad"]:
        """Unit of every angle."""
        return self.rig.angle_unit


TABLES: Mapping[str, type] = {
    "rig": Identity,
    "limits": Limits,
    "output": Output,
    "angle_sensor": AngleSensor,
    "step_test": StepTest,
    "tolerance": Tolerance,
    "requirements": Requirements,
    "simulated": Simulated,
}


def read_rig(path: Path | str) -> Rig:
    """The rig sheet in the file `path`.

    Raises
    ------
    RigSheetError
        The file is missing, is not UTF-8 or not TOML (with line), or a table or key is unknown,
        missing, of the wrong type or out of range (with file, table, key, value and allowed range).

    Examples
    --------
    >>> from freqid.stages.new import create_folder
    >>> rig = read_rig(create_folder("vane").rig)
    >>> rig.name, rig.limits.voltage, rig.angle_unit
    ('spring-centred vane', 5.0, 'deg')
    """
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise RigSheetError(f"{path}: no such rig sheet; `freqid new FOLDER` writes one with every key") from None
    except UnicodeDecodeError as error:
        raise RigSheetError(f"{path}: not UTF-8 text (byte {error.start}); save the file as UTF-8") from None
    return parse_rig(text, str(path))


def parse_rig(text: str, source: str = "rig.toml") -> Rig:
    """The rig sheet in `text`; `source` is what error messages call it. Raises RigSheetError as `read_rig`."""
    try:
        sheet = tomllib.loads(text)
    except (ValueError, RecursionError) as error:  # not TOML, an integer too long to read, or nested too deep
        raise RigSheetError(f"{source}: not valid TOML: {error}; correct that line") from None
    for name, values in sheet.items():
        if name not in TABLES:
            raise RigSheetError(f"{source}: unknown table [{name}]; {_nearest(name, list(TABLES))}")
        if not isinstance(values, dict):
            raise RigSheetError(f"{source}: {name} = {_shown(values)}: must be a table; write [{name}] on its own line")
    rig = Rig(
        rig=_table(Identity, sheet, "rig", source),
        limits=_table(Limits, sheet, "limits", source),
        output=_table(Output, sheet, "output", source),
        angle_sensor=_table(AngleSensor, sheet, "angle_sensor", source),
        step_test=_table(StepTest, sheet, "step_test", source),
        tolerance=_table(Tolerance, sheet, "tolerance", source),
        requirements=_table(Requirements, sheet, "requirements", source),
        simulated=_table(Simulated, sheet, "simulated", source),
    )
    _check_together(rig, source)
    return replace(rig, simulated=_filled(rig))


def _table(owner: type[Table], sheet: Mapping[str, Any], name: str, source: str) -> Table:
    values: dict[str, Any] = sheet.get(name, {})
    keys: dict[str, Field[Any]] = {key.name: key for key in fields(owner)}  # type: ignore[arg-type]
    for key in values:
        if key not in keys:
            raise RigSheetError(f"{source}: [{name}] unknown key {key!r}; {_where(key, name, list(keys))}")
    for key, declared in keys.items():
        if key not in values and declared.default is MISSING:
            rule: KeyRule = declared.metadata["rule"]
            raise RigSheetError(f"{source}: [{name}] {key} is missing ({rule.explanation}); give {_allowed(rule)}")
    checked = {key: _value(value, keys[key].metadata["rule"], f"{source}: [{name}] {key}")
               for key, value in values.items()}  # fmt: skip
    return owner(**checked)


def _value(value: Any, rule: KeyRule, where: str) -> float | str | bool:
    allowed = rule.allowed
    if isinstance(allowed, Range):
        number = isinstance(value, (int, float)) and not isinstance(value, bool)
        if number and value in allowed and math.isfinite(value):  # in this order: a huge integer is no float
            return float(value)
    elif isinstance(allowed, tuple):
        if value in allowed:
            return str(value)
    elif isinstance(value, (str, bool)) and isinstance(value, allowed) and value != "":
        return value
    raise RigSheetError(f"{where} = {_shown(value)}: must be {_allowed(rule)}")


def _allowed(rule: KeyRule) -> str:
    if isinstance(rule.allowed, Range):
        return f"a number {rule.allowed}{f' {rule.unit}' if rule.unit else ''}"
    if isinstance(rule.allowed, tuple):
        return " or ".join(f'"{word}"' for word in rule.allowed)
    return "true or false" if rule.allowed is bool else "a text in quotes, not empty"


def _check_together(rig: Rig, source: str) -> None:
    _check_requirements(rig.requirements, source)
    if abs(rig.limits.bias) >= rig.limits.voltage:
        raise RigSheetError(
            f"{source}: [limits] bias = {rig.limits.bias:g}: must lie inside ±voltage = ±{rig.limits.voltage:g} V"
        )
    interval = 1 / rig.angle_sensor.sample_rate
    if rig.angle_sensor.exposure > 1.01 * interval:  # 1 % for a rounded frame interval
        raise RigSheetError(
            f"{source}: [angle_sensor] exposure = {rig.angle_sensor.exposure:g}: must be at most the frame interval,"
            f" {interval:.4g} s at sample_rate = {rig.angle_sensor.sample_rate:g} Hz"
        )


def _check_requirements(wanted: Requirements, source: str) -> None:
    given = ["settling_time_max", "settling_band"]
    if (wanted.settling_time_max is None) != (wanted.settling_band is None):
        missing = given[0] if wanted.settling_time_max is None else given[1]
        other = given[1] if missing == given[0] else given[0]
        raise RigSheetError(f"{source}: [requirements] {missing} is missing; it goes with {other}: give both or none")
    for name in ("gain", "natural_frequency", "damping_ratio"):
        low, high = getattr(wanted, f"{name}_min"), getattr(wanted, f"{name}_max")
        if low is not None and high is not None and low > high:
            raise RigSheetError(
                f"{source}: [requirements] {name}_min = {low:g} is above {name}_max = {high:g}: nothing can meet both; "
                "exchange them"
            )


def _filled(rig: Rig) -> Simulated:
    known = {name: getattr(rig.step_test, name) for name in ("gain", "natural_frequency", "damping_ratio", "delay")}
    known["noise"] = rig.angle_sensor.noise
    return replace(
        rig.simulated, **{name: value for name, value in known.items() if getattr(rig.simulated, name) is None}
    )


def _where(key: str, table: str, keys: list[str]) -> str:
    for other, owner in TABLES.items():
        if other != table and key in {known.name for known in fields(owner)}:
            return f"it belongs in [{other}]" if not _close(key, keys) else _nearest(key, keys)
    return _nearest(key, keys)


def _close(name: str, known: list[str]) -> list[str]:
    return difflib.get_close_matches(name.lower(), known, n=1, cutoff=0.6)


def _nearest(name: str, known: list[str]) -> str:
    close = _close(name, known)
    return f"did you mean {close[0]!r}?" if close else f"known are {', '.join(known)}"


def _shown(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."
