"""Do the product's own functions reproduce the published values of `reference_data` on this machine?

Each file of `reference_data` holds entries: the name of a quantity, its inputs, the published value with its
rounding, source and status (`reference_data/README.md` describes the format). The quantity is computed here by the
functions the product itself uses and compared. A rule of thumb is not expected to be met: for it the known error of
the rule is compared with the error found.
"""

from __future__ import annotations

import math
import tomllib
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from freqid.errors import FreqidError
from freqid.published_quantities import QUANTITIES

__all__ = [
    "STATUSES",
    "PublishedValue",
    "ValueCheck",
    "check_published_values",
    "read_published_values",
    "reference_folder",
]

STATUSES = ("confirmed", "from memory", "common practice", "derived identity")
NEEDED = ("row", "quantity", "published", "unit", "rounding", "tolerance", "tolerance_reason", "status", "source")
OPTIONAL = ("inputs", "conditions", "rule_error_percent")


@dataclass(frozen=True, slots=True, kw_only=True)
class PublishedValue:
    """One number from outside the project, and what it is compared with.

    `published`, `rounding` (largest rounding error of the printed value) and `tolerance` are in `unit`. For a rule of
    thumb `rule_error_percent` says by how much the rule is off, relative to the exact value, and `tolerance` is in
    percent of the exact value.
    """

    file: str
    row: str
    quantity: str
    inputs: Mapping[str, float]
    published: float
    unit: str
    rounding: float
    tolerance: float
    tolerance_reason: str
    status: str
    source: str
    conditions: str = ""
    rule_error_percent: float | None = None

    @property
    def label(self) -> str:
        """Row, quantity and inputs in one word."""
        inputs = ",".join(f"{name}={value:g}" for name, value in self.inputs.items())
        return f"{self.row}-{self.quantity}({inputs})"


@dataclass(frozen=True, slots=True, kw_only=True)
class ValueCheck:
    """A published value beside the value computed here, in the same unit.

    Where the computation failed `computed` is NaN, which passes nowhere, and `fault` says why.
    """

    entry: PublishedValue
    computed: float
    fault: str = ""

    @property
    def deviation(self) -> float:
        """Published minus computed, in the unit of the entry; for a rule of thumb in percent of the computed value."""
        difference = self.entry.published - self.computed
        if self.entry.rule_error_percent is None:
            return difference
        return 100 * difference / self.computed if self.computed else math.inf

    @property
    def passed(self) -> bool:
        """Whether the deviation is within the tolerance of what is expected (zero, or the rule's known error)."""
        return abs(self.deviation - (self.entry.rule_error_percent or 0.0)) <= self.entry.tolerance


def check_published_values(entries: Iterable[PublishedValue] | None = None) -> Iterator[ValueCheck]:
    """Compute each entry's quantity, one at a time; all entries of `reference_data` unless told."""
    for entry in read_published_values() if entries is None else entries:
        yield _check(entry)


def _check(entry: PublishedValue) -> ValueCheck:
    try:
        return ValueCheck(entry=entry, computed=float(QUANTITIES[entry.quantity](**entry.inputs)))
    except Exception as fault:  # whatever keeps a value from being computed is a value missed, not the end of the check
        return ValueCheck(entry=entry, computed=math.nan, fault=f"{type(fault).__name__}: {fault}")


def read_published_values(folder: Path | None = None) -> tuple[PublishedValue, ...]:
    """All entries of the TOML files in a folder, by default the `reference_data` that came with the program.

    An entry that holds lists is one row of a table; it becomes one value for each place of the lists.

    Raises
    ------
    FreqidError
        The folder or its files are missing, or an entry is not as the format asks.
    """
    folder = reference_folder() if folder is None else folder
    files = sorted(folder.glob("*.toml"))
    if not files:
        raise FreqidError(f"{folder}: no reference values (*.toml) there; install the program anew")
    return tuple(value for file in files for value in _read_file(file))


def reference_folder() -> Path:
    """Where the reference data lie: within the installed package; beside it in a checkout."""
    package = Path(__file__).parent
    inside = package / "reference_data"
    return inside if inside.is_dir() else package.parent / "reference_data"


def _read_file(file: Path) -> Iterator[PublishedValue]:
    try:
        with file.open("rb") as stream:
            content = tomllib.load(stream)
    except (OSError, ValueError) as fault:
        raise FreqidError(f"{file.name}: not readable as TOML: {fault}") from fault
    defaults = content.get("defaults", {})
    for number, row in enumerate(content.get("entry", []), start=1):
        yield from _expanded(file.name, f"{file.name}, entry {number}", {**defaults, **row})


def _expanded(file: str, place: str, row: dict[str, Any]) -> Iterator[PublishedValue]:
    _check_row(place, row)
    lists = [value for value in (*row.values(), *row["inputs"].values()) if isinstance(value, list)]
    count = max((len(value) for value in lists), default=1)
    for index in range(count):
        yield PublishedValue(
            file=file,
            inputs={name: _pick(f"{place}, {name}", value, index, count) for name, value in row["inputs"].items()},
            **{name: _pick(f"{place}, {name}", row[name], index, count) for name in row if name != "inputs"},
        )


def _pick(place: str, value: Any, index: int, count: int) -> Any:
    """One place of a list; a single value counts for all places."""
    if not isinstance(value, list):
        return value
    if len(value) != count:
        raise FreqidError(f"{place}: a list of {len(value)} beside one of {count}; give as many, or a single value")
    return value[index]


def _check_row(place: str, row: dict[str, Any]) -> None:
    row.setdefault("inputs", {})
    missing = [name for name in NEEDED if name not in row]
    unknown = [name for name in row if name not in (*NEEDED, *OPTIONAL)]
    if missing or unknown:
        raise FreqidError(f"{place}: missing keys: {', '.join(missing) or '-'}; unknown: {', '.join(unknown) or '-'}")
    if row["quantity"] not in QUANTITIES:
        raise FreqidError(f"{place}: quantity = {row['quantity']!r} is none that can be computed")
    for status in _each(row["status"]):
        if status not in STATUSES:
            raise FreqidError(f"{place}: status = {status!r}: must be one of {', '.join(STATUSES)}")
    for tolerance in _each(row["tolerance"]):
        if not (math.isfinite(tolerance) and tolerance > 0):
            raise FreqidError(f"{place}: tolerance = {tolerance}: must be above 0")


def _each(value: Any) -> list[Any]:
    return value if isinstance(value, list) else [value]
