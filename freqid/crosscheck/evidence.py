"""What may a cause be read from? Both results, the comparison so far, and the raw runs behind them.

Causes that need a raw run are silent where it is missing: results typed in, or files deleted.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from freqid.crosscheck.comparison_result import ComparedRow, CrossCheck
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.model import IdentifiedModel
from freqid.records import Run
from freqid.step_test.step_result import StepResult

if TYPE_CHECKING:
    from freqid.rig import Rig

__all__ = ["Evidence", "Recorded"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Recorded:
    """What the tests recorded, as far as it is at hand: raw runs of both tests, measured response, rig sheet."""

    response_runs: tuple[Run, ...] = ()
    step_runs: tuple[Run, ...] = ()
    response: FrequencyResponse | None = None
    rig: Rig | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Evidence:
    """The comparison (rows, verdict), the two results it compares, what was recorded, and the folder for commands."""

    check: CrossCheck
    model: IdentifiedModel
    step: StepResult
    recorded: Recorded = field(default_factory=Recorded)
    folder: str = "FOLDER"

    @property
    def gains_are_opposite(self) -> bool:
        """Whether one test sees the angle move against the voltage and the other with it."""
        return self.model.model.gain * self.step.model.gain < 0

    @property
    def rows(self) -> dict[str, ComparedRow]:
        """The compared quantities by name."""
        return {row.quantity: row for row in self.check.compared}
