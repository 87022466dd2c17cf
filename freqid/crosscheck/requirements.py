"""Does the rig meet its acceptance limits? Each limit of [requirements] judged with its uncertainty, by both tests.

*met*: the whole 95 % interval lies on the allowed side; *not met*: all of it lies beyond; *not decided*: the limit lies
inside the interval, or the quantity is unknown. Both tests together: what one of them decides and the other does not
contradict. This is the guarded acceptance of JCGM 106:2012, 8.3.3, with a guard band of one expanded uncertainty
for acceptance and for rejection.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Any, Literal

from freqid.crosscheck.findings import Findings
from freqid.errors import CrossCheckError
from freqid.quantity import Quantity
from freqid.rig_tables import Requirements

__all__ = ["Fulfilment", "RequirementRow", "check_unit_of_limits", "judge_requirements"]

Fulfilment = Literal["met", "not met", "not decided"]
BAND_KEY = "settling_band"
OF_PARAMETERS = ("gain", "natural_frequency", "damping_ratio", "delay")


@dataclass(frozen=True, slots=True, kw_only=True)
class RequirementRow:
    """One limit: its key in the rig sheet, the quantity it limits, and what each test says of it.

    `limit` is in `unit`; `sense` says whether it is the most or the least allowed. `reason` says what is lacking.
    """

    requirement: str
    quantity: str
    sense: Literal["max", "min"]
    limit: float
    unit: str
    frequency_test: Quantity | None
    step_test: Quantity | None
    frequency_verdict: Fulfilment
    step_verdict: Fulfilment
    verdict: Fulfilment
    reason: str = ""

    def as_json(self) -> dict[str, Any]:
        """One entry of "requirements" in results/crosscheck.json."""

        def plain(q: Quantity | None) -> dict[str, Any] | None:
            return None if q is None else q.as_json()

        return {
            "requirement": self.requirement,
            "quantity": self.quantity,
            "sense": self.sense,
            "limit": self.limit,
            "unit": self.unit,
            "frequency_test": plain(self.frequency_test),
            "step_test": plain(self.step_test),
            "frequency_verdict": self.frequency_verdict,
            "step_verdict": self.step_verdict,
            "verdict": self.verdict,
            "reason": self.reason,
        }

    @classmethod
    def from_json(cls, data: dict[str, Any]) -> RequirementRow:
        """Back from the form of results/crosscheck.json."""
        known = {name: Quantity.from_json(data[name]) for name in ("frequency_test", "step_test")}
        return cls(**{**data, **known})


def judge_requirements(wanted: Requirements, first: Findings, second: Findings) -> tuple[RequirementRow, ...]:
    """Every limit that is given, in the order of the sheet; `first` is the frequency test, `second` the step test."""
    return tuple(
        _row(key.name, limit, key.metadata["unit"], wanted, (first, second))
        for key in fields(wanted)
        if key.name != BAND_KEY and (limit := getattr(wanted, key.name)) is not None
    )


def check_unit_of_limits(wanted: Requirements, sheet_unit: str, result_unit: str) -> None:
    """Raise CrossCheckError where a limit is told in another angle unit than the results."""
    for key in fields(wanted):
        limit = getattr(wanted, key.name)
        if limit is not None and "angle_unit" in key.metadata["unit"] and sheet_unit != result_unit:
            raise CrossCheckError(
                f"rig.toml: [requirements] {key.name} = {limit:g} is in {sheet_unit}/V ([rig] angle_unit), the results "
                f"are in {result_unit}/V: set angle_unit to \"{result_unit}\" again, or record and evaluate new runs"
            )


def _row(
    key: str, limit: float, unit: str, wanted: Requirements, tests: tuple[Findings, Findings]
) -> RequirementRow:
    name, _, sense = key.rpartition("_")
    values = [_value(name, test, wanted) for test in tests]
    verdicts = [_fulfilment(q, limit, sense) for q in values]
    known = next((q for q in values if q is not None), None)
    return RequirementRow(
        requirement=key,
        quantity=name,
        sense="max" if sense == "max" else "min",
        limit=limit,
        unit=unit.replace("angle_unit", tests[0].angle_unit) if known is None else known.unit,
        frequency_test=values[0],
        step_test=values[1],
        frequency_verdict=verdicts[0],
        step_verdict=verdicts[1],
        verdict=_together(verdicts),
        reason=_lacking(name, verdicts, values, tests),
    )


def _value(name: str, test: Findings, wanted: Requirements) -> Quantity | None:
    if name == "delay" and not test.offset_known:
        return None
    if name == "settling_time" and wanted.settling_band is not None:
        return test.settling_time(wanted.settling_band)
    found = test.parameters.get(name) if name in OF_PARAMETERS else test.shown(name)
    return found.size if found is not None and name == "gain" else found


def _fulfilment(found: Quantity | None, limit: float, sense: str) -> Fulfilment:
    if found is None:
        return "not decided"
    low, high = found.interval_95
    if sense == "min":
        low, high, limit = -high, -low, -limit
    return "met" if high <= limit else "not met" if low > limit else "not decided"


def _together(verdicts: list[Fulfilment]) -> Fulfilment:
    decided = {verdict for verdict in verdicts if verdict != "not decided"}
    return decided.pop() if len(decided) == 1 else "not decided"


def _lacking(
    name: str, verdicts: list[Fulfilment], values: list[Quantity | None], tests: tuple[Findings, Findings]
) -> str:
    if set(verdicts) == {"met", "not met"}:
        return "the two tests contradict each other"
    if _together(verdicts) != "not decided":
        return ""
    if any(q is not None for q in values):
        return "the limit lies inside the 95 % interval: measure longer"
    if name == "delay":
        return "the delay contains the unknown offset between the clocks"
    return next((why for test in tests if (why := test.silence.get(name))), "undetermined by both tests")
