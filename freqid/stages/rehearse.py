"""What would the whole job say of the rig described in the rig sheet? Every stage in order, on the simulated rig."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from freqid.crosscheck.comparison_result import CrossCheck
from freqid.estimate.identification import Identification
from freqid.stages import Progress, silent
from freqid.stages.capture import capture_simulated
from freqid.stages.crosscheck import cross_check_folder
from freqid.stages.estimate import estimate_folder
from freqid.stages.excite import ExciteSettings, design_excitation
from freqid.stages.new import create_folder
from freqid.stages.report import report_folder
from freqid.stages.steptest import step_test_folder
from freqid.step_test.step_result import StepResult
from freqid.test_folder import TestFolder

__all__ = ["Rehearsal", "rehearse"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Rehearsal:
    """What the rehearsal gave, and where."""

    folder: TestFolder
    identification: Identification
    step: StepResult
    check: CrossCheck


def rehearse(path: Path, *, seed: int = 1, progress: Progress = silent) -> Rehearsal:
    """Run the whole job in the folder `path`: design, simulated runs, estimates, cross-check, report.

    A folder without a rig sheet gets the built-in vane. `seed` fixes phases and noise; the step run takes the next
    seed.
    Raises what the single stages raise.
    """
    folder = TestFolder(path)
    if not folder.rig.exists():
        folder = create_folder(path)
    stages = 8

    def part(number: int) -> Progress:
        def tell(doing: str, fraction: float | None = None) -> None:
            progress(doing, (number + (fraction or 0.0)) / stages)

        return tell

    design_excitation(folder, ExciteSettings(kind="multisine", seed=seed), progress=part(0))
    capture_simulated(folder, kind="response", seed=seed, progress=part(1))
    identification = estimate_folder(folder, progress=part(2))
    design_excitation(folder, ExciteSettings(kind="step", seed=seed), progress=part(3))
    capture_simulated(folder, kind="step", seed=seed + 1, progress=part(4))
    step = step_test_folder(folder, progress=part(5))
    part(6)("cross-checking")
    check = cross_check_folder(folder)
    report_folder(folder, progress=part(7))
    return Rehearsal(folder=folder, identification=identification, step=step, check=check)
