"""What goes into a report? Everything a test folder holds, each part present or not."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from freqid.crosscheck.comparison_result import CrossCheck
from freqid.estimate.identification import Identification
from freqid.records import Run
from freqid.rig import Rig
from freqid.step_test.step_result import StepResult

__all__ = ["ReportInputs"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ReportInputs:
    """The parts of a report; a part that is None is left out, with a sentence that says which command makes it.

    `files` maps names relative to the test folder to their sha256, `versions` names of programs to versions, `created`
    is the date and time shown, `folder` the test folder as written on a command line.
    """

    rig: Rig
    identification: Identification | None = None
    response_run: Run | None = None
    step_result: StepResult | None = None
    step_run: Run | None = None
    crosscheck: CrossCheck | None = None
    files: Mapping[str, str] = field(default_factory=dict)
    versions: Mapping[str, str] = field(default_factory=dict)
    created: str = ""
    folder: str = "FOLDER"
