"""What came out of holding two tests against each other? One row a quantity, the joint test, the verdict.

Source: design of the verdict in DEVELOPERS.md; En: ISO/IEC 17043:2010, B.3.1.3.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from typing import TYPE_CHECKING, Any, Literal

from freqid.notebook_form import shown_by
from freqid.quantity import Caveat, Quantity

if TYPE_CHECKING:
    from freqid.crosscheck.exhibit import Exhibit
    from freqid.crosscheck.requirements import RequirementRow

__all__ = ["USUAL_LABELS", "Cause", "ComparedRow", "CrossCheck", "JointTest", "NextTest", "RowVerdict", "Verdict"]

USUAL_LABELS = ("frequency test", "step test")
Verdict = Literal["agree", "disagree", "unresolved"]
RowVerdict = Literal["agree", "disagree", "unresolved", "not judged"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ComparedRow:
    """One quantity by both results. `tolerance` is absolute, in the unit of the quantity; None where none was set (then
    not judged).

    `difference` is frequency test minus step test; `en` its En number; `reason` says why a row is not judged. In a
    comparison of other results `frequency_test` is the first and `step_test` the second, see `CrossCheck.labels`.
    """

    quantity: str
    frequency_test: Quantity | None
    step_test: Quantity | None
    difference: Quantity | None
    en: float | None
    tolerance: float | None
    verdict: RowVerdict
    reason: str = ""

    def as_json(self) -> dict[str, Any]:
        """One entry of "compared" in results/crosscheck.json."""

        def plain(q: Quantity | None) -> dict[str, Any] | None:
            return None if q is None else q.as_json()

        return {
            "quantity": self.quantity,
            "frequency_test": plain(self.frequency_test),
            "step_test": plain(self.step_test),
            "difference": plain(self.difference),
            "en": self.en,
            "tolerance": self.tolerance,
            "verdict": self.verdict,
            "reason": self.reason,
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class JointTest:
    """All judged quantities at once: chi-square of the difference vector with the joint covariances."""

    statistic: float
    degrees_of_freedom: int
    p_value: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Cause:
    """A possible cause of a disagreement: a stable code, strength 0 to 1, and the evidence in one sentence.

    `against` is what speaks against it, `settling_test` the test that would tell it from its rivals (both empty where
    there is nothing to say), `exhibit` the figure that shows the evidence.
    """

    cause: str
    strength: float
    evidence: str
    against: str = ""
    exhibit: Exhibit | None = None
    settling_test: str = ""

    def as_json(self) -> dict[str, Any]:
        """One entry of "causes" in results/crosscheck.json."""
        return {
            "cause": self.cause,
            "strength": self.strength,
            "evidence": self.evidence,
            "against": self.against,
            "exhibit": None if self.exhibit is None else self.exhibit.as_json(),
            "settling_test": self.settling_test,
        }

    @classmethod
    def from_json(cls, data: dict[str, Any]) -> Cause:
        """Back from the form of results/crosscheck.json."""
        shown = data.get("exhibit")
        if shown is not None:
            from freqid.crosscheck.exhibit import Exhibit

            shown = Exhibit.from_json(shown)
        return cls(
            cause=data["cause"],
            strength=data["strength"],
            evidence=data["evidence"],
            against=data.get("against", ""),
            exhibit=shown,
            settling_test=data.get("settling_test", ""),
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class NextTest:
    """What to run next: a command to copy, and what it will settle.

    `commands` are all of them where both tests must be repeated. `duration` (s) and `amplitude` (V) are those of
    `command`, None where the usual ones will do. `expected` tells, by quantity, the relative half width of the 95 %
    interval that the difference will then have.
    """

    command: str
    reason: str
    kind: str = "multisine"
    duration: float | None = None
    amplitude: float | None = None
    commands: tuple[str, ...] = ()
    expected: Mapping[str, float] = field(default_factory=dict)

    def as_json(self) -> dict[str, Any]:
        """The form of "next_test" in results/crosscheck.json."""
        return {**asdict(self), "commands": list(self.commands or (self.command,))}

    @classmethod
    def from_json(cls, data: dict[str, Any] | None) -> NextTest | None:
        """Back from the form of results/crosscheck.json; None stays None."""
        return None if data is None else cls(**{**data, "commands": tuple(data.get("commands", ()))})


@dataclass(frozen=True, slots=True, kw_only=True)
class CrossCheck:
    """The verdict with everything it rests on.

    `sentence` is the reason in one sentence, `labels` what the two columns of a row are, `requirements` the acceptance
    limits of the rig sheet as judged.
    """

    verdict: Verdict
    sentence: str
    compared: tuple[ComparedRow, ...]
    joint: JointTest | None
    causes: tuple[Cause, ...] = ()
    next_test: NextTest | None = None
    labels: tuple[str, str] = USUAL_LABELS
    requirements: tuple[RequirementRow, ...] = ()
    caveats: tuple[Caveat, ...] = ()

    _repr_html_ = shown_by("cross_check_html")
