"""Which test settles it? The one whose uncertainty stands in the way, long enough to bring it below the tolerance.

Random uncertainty falls with the square root of the duration (common practice). The wanted uncertainty of the
difference is
what is left of the tolerance beside the difference already found, at least a third of the tolerance.
"""

from __future__ import annotations

import math

from freqid.crosscheck.comparison_result import ComparedRow, CrossCheck, NextTest
from freqid.estimate.model import IdentifiedModel
from freqid.step_test.step_result import StepResult

__all__ = ["propose_next_test"]


def propose_next_test(
    check: CrossCheck, model: IdentifiedModel, step: StepResult, *, folder: str
) -> NextTest | None:
    """The next test for an unresolved or contradicted verdict; None where the tests agree."""
    if check.verdict == "agree":
        return None
    if check.verdict == "disagree":
        return NextTest(
            command=f"freqid excite {folder} --kind multisine --seed 2",
            reason=(
                "Repeat the frequency test with new phases at the operating point and amplitude of the step test: if "
                "the result "
                "stays, the rig differs between the tests; if it moves, something drifts."
            ),
        )
    wide = [row for row in check.compared if row.verdict == "unresolved"]
    measured = [row for row in wide if row.difference is not None and row.tolerance is not None]
    if not measured:
        names = ", ".join(row.quantity.replace("_", " ") for row in wide)
        return NextTest(
            command=f"freqid excite {folder} --kind multisine",
            reason=f"{names}: not determined by both tests; excite around the resonance and at low frequency.",
        )
    worst = max(measured, key=_factor)
    factor = _factor(worst)
    assert worst.frequency_test is not None and worst.step_test is not None
    step_is_wider = worst.step_test.expanded_uncertainty > worst.frequency_test.expanded_uncertainty
    kind, frames, interval = (
        ("step", step.clock.frames, step.clock.frame_interval)
        if step_is_wider
        else ("multisine", model.clock.frames, model.clock.frame_interval)
    )
    present = max(frames, 1) * interval
    duration = _round_up(present * factor**2)
    name = worst.quantity.replace("_", " ")
    return NextTest(
        command=f"freqid excite {folder} --kind {kind} --duration {duration}",
        reason=(
            f"The {name} decides it, and the {'step' if step_is_wider else 'frequency'} test is the less certain of "
            f"it: "
            f"{duration} s instead of {present:.0f} s bring the uncertainty down {factor:.2g} times."
        ),
    )


def _factor(row: ComparedRow) -> float:
    """How many times smaller the uncertainty of the difference must become."""
    assert row.difference is not None and row.tolerance is not None
    left = max(row.tolerance - abs(row.difference.value), row.tolerance / 3)
    return max(row.difference.expanded_uncertainty / left, 1.2)


def _round_up(seconds: float) -> int:
    step: int = 10 ** max(math.floor(math.log10(seconds)) - 1, 0)
    return math.ceil(seconds / step) * step
