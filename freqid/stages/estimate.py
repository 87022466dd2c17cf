"""How do runs become a frequency response and a model? Read, estimated, kept in results/."""

from __future__ import annotations

from freqid.errors import EstimationError
from freqid.estimate.combination import combine
from freqid.estimate.identification import Identification, Method, identify
from freqid.estimate.long_run import read_for_estimate
from freqid.estimate.result_files import write_identification
from freqid.records import Run, RunKind
from freqid.run_file import read_run_facts
from freqid.stages import Progress, silent
from freqid.test_folder import TestFolder

__all__ = ["choose_runs", "estimate_folder"]


def estimate_folder(
    folder: TestFolder, *, run: str | None = None, method: Method = "auto", progress: Progress = silent
) -> Identification:
    """Estimate from one run (the latest complete one unless named), or from "all", and write results/.

    Raises
    ------
    TestFolderError
        There is no such run.
    EstimationError
        The record does not determine the answer.
    """
    runs = choose_runs(folder, "response", run)
    found = []
    for number, one in enumerate(runs):
        progress(f"estimating from {one.name}", number / len(runs))
        found.append(identify(one, method=method))
    result = combine(found)
    write_identification(folder, result, computed_from={folder.run(one.name): one.file_sha256 for one in runs})
    return result


def choose_runs(folder: TestFolder, kind: RunKind, name: str | None) -> list[Run]:
    """The runs meant by `name`: None the latest complete one, "all" every complete one, else that one.

    A run named is taken even if it ended early. Long response runs come shortened (`read_for_estimate`).
    """
    if name is not None and name != "all":
        return [read_for_estimate(folder.run(name))]
    folder.latest_run_name(kind)  # says what is missing where there is none
    complete = [one for one in folder.run_names(kind) if read_run_facts(folder.run(one)).complete]
    if not complete:
        raise EstimationError(f"{folder.runs}: no {kind} run is complete; name one with --run to use it nevertheless")
    return [read_for_estimate(folder.run(one)) for one in (complete if name == "all" else complete[-1:])]
