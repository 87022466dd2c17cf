"""How does a step run become step-test values? Read, evaluated, kept in results/step.json."""

from __future__ import annotations

from freqid.stages import Progress, silent
from freqid.stages.estimate import choose_runs
from freqid.step_test.evaluation import evaluate_steps
from freqid.step_test.result_file import write_step_result
from freqid.step_test.step_result import StepResult
from freqid.test_folder import TestFolder

__all__ = ["step_test_folder"]


def step_test_folder(folder: TestFolder, *, run: str | None = None, progress: Progress = silent) -> StepResult:
    """Evaluate one step run (the latest complete one unless named) and write results/step.json.

    Raises TestFolderError, StepTestError or EstimationError, each with what to do.
    """
    chosen = choose_runs(folder, "step", run)[0]
    progress(f"evaluating {chosen.name}")
    result = evaluate_steps(chosen)
    write_step_result(folder, result, computed_from=[folder.run(chosen.name)])
    return result
