"""How does a test folder become a page? What is there is read, checked to belong together, and drawn."""

from __future__ import annotations

import platform
from collections.abc import Iterable
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any, Literal

import freqid
from excitation.hdf5_file import file_sha256
from freqid.crosscheck.result_file import read_crosscheck
from freqid.errors import TestFolderError
from freqid.estimate.long_run import read_for_estimate
from freqid.estimate.result_files import read_identification
from freqid.freshness import changed_sources
from freqid.records import Run
from freqid.rig import read_rig
from freqid.stages import Progress, silent
from freqid.step_test.result_file import read_step_result
from freqid.test_folder import TestFolder, write_text

__all__ = ["FigureForm", "gather", "report_folder"]

FigureForm = Literal["svg", "pdf", "png"]
LIBRARIES = ("numpy", "scipy", "matplotlib", "h5py")


def report_folder(
    folder: TestFolder, *, forms: Iterable[FigureForm] = (), progress: Progress = silent
) -> Path:
    """Write report.html and the figures from what the folder holds; returns the page's path.

    `forms` are those in which each figure is written besides SVG.

    Raises TestFolderError where there is nothing to report, or where results were computed from files that have
    changed since.
    """
    from freqid.report import draw_report, write_report
    from freqid.report.figure_style import save_figure

    progress("reading the results")
    inputs = gather(folder)
    progress("drawing the figures", 0.2)
    figures = draw_report(inputs)
    for name, made in figures.items():
        if made.figure is not None:
            for form in ("svg", *forms):
                save_figure(made.figure, folder.figures / f"{name}.{form}")
    progress("writing the page", 0.7)
    write_text(folder.report, write_report(inputs, figures=figures))
    return folder.report


def gather(folder: TestFolder) -> Any:
    """Everything of the folder that belongs into a report, as `freqid.report.ReportInputs`."""
    from freqid.report import ReportInputs

    rig = read_rig(folder.rig)
    found = read_identification(folder) if folder.model.exists() else None
    step = read_step_result(folder) if folder.step.exists() else None
    if found is None and step is None:
        raise TestFolderError(
            f"{folder.results}: nothing to report yet; run `freqid estimate {folder.quoted}` or `freqid steptest "
            f"{folder.quoted}`"
        )
    check = None
    if folder.crosscheck.exists():
        _refuse_stale(folder, folder.crosscheck, "crosscheck")
        check = read_crosscheck(folder)
    if found is not None:
        _refuse_stale(folder, folder.model, "estimate")
    if step is not None:
        _refuse_stale(folder, folder.step, "steptest")
    response_run = _run(folder, found.model.runs) if found is not None else None
    step_run = _run(folder, step.runs) if step is not None else None
    return ReportInputs(
        rig=rig,
        identification=found,
        response_run=response_run,
        step_result=step,
        step_run=step_run,
        crosscheck=check,
        files=_hashes(folder, [response_run, step_run]),
        versions=_versions(),
        created=f"{datetime.now(UTC):%Y-%m-%d %H:%M:%S} UTC",
        folder=folder.quoted,
    )


def _run(folder: TestFolder, names: tuple[str, ...]) -> Run | None:
    path = folder.run(names[-1]) if names else None
    return read_for_estimate(path) if path is not None and path.exists() else None


def _refuse_stale(folder: TestFolder, path: Path, verb: str) -> None:
    """A result must have been computed from the files that stand beside it; the rig sheet may change afterwards."""
    for name in changed_sources(folder, path):
        if folder.path / name != folder.rig:
            raise TestFolderError(
                f"{path}: was computed from another {name} than the one there now; run `freqid {verb} "
                f"{folder.quoted}` again"
            )


def _hashes(folder: TestFolder, runs: Iterable[Run | None]) -> dict[str, str]:
    files = [folder.rig, folder.profile_h5, folder.profile("step"), folder.response_h5, folder.model, folder.step]
    files += [folder.run(run.name) for run in runs if run is not None] + [folder.crosscheck]
    hashes = {folder.relative_name(path): file_sha256(path) for path in files if path.exists()}
    for run in runs:
        for origin in run.origins if run is not None else ():
            if origin.sha256 is not None:
                hashes.setdefault(origin.source, origin.sha256)
    return hashes


def _versions() -> dict[str, str]:
    found = {"freqid": freqid.__version__, "Python": platform.python_version(), "system": platform.platform()}
    for name in LIBRARIES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            found[name] = "not installed as a package"
    return found
