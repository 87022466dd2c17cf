"""How do both results become a verdict? Compared within the tolerances of the rig sheet, kept in
results/crosscheck.json.
"""

from __future__ import annotations

from dataclasses import replace

from freqid.crosscheck.comparison import cross_check
from freqid.crosscheck.comparison_result import CrossCheck
from freqid.crosscheck.evidence import Recorded
from freqid.crosscheck.findings import findings_of_model, findings_of_step
from freqid.crosscheck.requirements import check_unit_of_limits, judge_requirements
from freqid.crosscheck.result_file import write_crosscheck
from freqid.estimate.long_run import read_for_estimate
from freqid.estimate.resonance import read_resonance
from freqid.estimate.result_files import read_identification
from freqid.records import Run
from freqid.rig import read_rig
from freqid.stages import Progress, silent
from freqid.stages.forecast import forecast_for
from freqid.step_test.result_file import read_step_result
from freqid.test_folder import TestFolder

__all__ = ["cross_check_folder"]


def cross_check_folder(folder: TestFolder, *, progress: Progress = silent) -> CrossCheck:
    """Compare results/model.json with results/step.json and write results/crosscheck.json."""
    progress("comparing the two tests")
    rig = read_rig(folder.rig)
    found, step = read_identification(folder), read_step_result(folder)
    tolerance = {name: getattr(rig.tolerance, name) for name in ("gain", "natural_frequency", "damping_ratio")}
    check = cross_check(
        found.model,
        step,
        tolerance=tolerance,
        resonance=read_resonance(found.response),
        folder=folder.quoted,
        recorded=Recorded(
            response_runs=_runs(folder, found.model.runs),
            step_runs=_runs(folder, step.runs),
            response=found.response,
            rig=rig,
        ),
        forecast=forecast_for(rig, found, step),
    )
    check_unit_of_limits(rig.requirements, rig.angle_unit, found.model.angle_unit)
    requirements = judge_requirements(
        rig.requirements, findings_of_model(found.model, read_resonance(found.response)), findings_of_step(step)
    )
    check = replace(check, requirements=requirements)
    sources = [folder.rig, folder.model, folder.response_h5, folder.step]
    write_crosscheck(folder, check, computed_from=sources)
    return check


def _runs(folder: TestFolder, names: tuple[str, ...]) -> tuple[Run, ...]:
    """The raw runs behind a result, as far as they still lie in the folder."""
    return tuple(read_for_estimate(folder.run(name)) for name in names if folder.run(name).exists())
