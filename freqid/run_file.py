"""How does a run get into runs/NAME.h5 and back, with nothing lost?

Datasets input/time, input/voltage, angle/time, angle/angle and, for a periodic excitation,
input/lines, each with its unit; everything else in the attributes of the root, lists as JSON text.
A stream of even rate may leave its time dataset out (format version 2): then the attributes STREAM_start (s) and
STREAM_sample_rate (Hz) say the instant of sample n, start + n / sample_rate, and its samples may be of any number type.
A run is raw: it is written once, made read-only, and never written again.

A long run is written and read in blocks (`write_run_in_blocks`, `open_run`): an hour of two channels at 48 kHz is
never in memory as a whole.
"""

from __future__ import annotations

import json
from collections.abc import Iterable
from dataclasses import asdict, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from numpy.typing import NDArray

from excitation.hdf5_file import Column, file_sha256, write_hdf5, write_hdf5_in_blocks
from freqid.errors import TestFolderError
from freqid.quantity import unit_of
from freqid.records import AngleStream, InputStream, Periodicity, Run
from freqid.stored_run import (
    RUN_FORMAT,
    RUN_FORMAT_VERSION,
    VALUES,
    EvenRate,
    OpenRun,
    StoredStream,
    open_run,
    read_only,
)
from freqid.test_folder import make_read_only

if TYPE_CHECKING:
    from freqid.test_folder import TestFolder

__all__ = [
    "RUN_FORMAT",
    "RUN_FORMAT_VERSION",
    "EvenRate",
    "OpenRun",
    "StoredStream",
    "open_run",
    "read_run",
    "read_run_facts",
    "write_run",
    "write_run_in_blocks",
]

SAMPLE_TYPE = "<f4"  # of samples written in blocks: all that a converter of 24 bits gives


def write_run(folder: TestFolder, run: Run) -> Path:
    """Write `run` to runs/NAME.h5 of the folder and make the file read-only.

    Returns
    -------
    Path
        The file; `read_run` of it gives the run back with its sha256.

    Raises
    ------
    TestFolderError
        There is a run of this name already: raw runs are never replaced.
    OSError
        The disk is full or may not be written. Nothing is left behind.
    """
    path = _free_path(folder, run)
    write_hdf5(path, datasets=_datasets(run), attributes=_attributes(folder, run))
    make_read_only(path)
    return path


def write_run_in_blocks(
    folder: TestFolder,
    facts: Run,
    blocks: Iterable[tuple[NDArray[Any], NDArray[Any]]],
    *,
    rate: EvenRate,
    samples: int,
) -> Path:
    """Write a run whose two streams were sampled together, block by block; the memory holds one block.

    Parameters
    ----------
    facts
        The run with empty arrays.
    blocks
        Voltage (B,) V and angle (B,) in the angle unit, in order; blocks may be of any length.
    rate
        The clock of both streams.
    samples
        How many samples of each stream to expect: the disk must have room for them.

    Raises
    ------
    TestFolderError, OSError
        As `write_run`. Nothing is left behind, also where `blocks` raises.
    """
    path = _free_path(folder, facts)
    attributes = _attributes(folder, facts)
    for name in VALUES:
        attributes |= {f"{name}_start": rate.start, f"{name}_sample_rate": rate.sample_rate}
    write_hdf5_in_blocks(
        path,
        columns=(
            Column(name="input/voltage", dtype=SAMPLE_TYPE, unit=unit_of(InputStream, "voltage")),
            Column(name="angle/angle", dtype=SAMPLE_TYPE, unit=facts.angle.angle_unit),
        ),
        blocks=blocks,
        rows=samples,
        datasets=_lines(facts),
        attributes=attributes | {"format_version": RUN_FORMAT_VERSION},
    )
    make_read_only(path)
    return path


def read_run(path: Path | str) -> Run:
    """The run in the file `path`, its arrays read-only, with the sha256 of the file.

    Raises
    ------
    TestFolderError
        The file is missing, damaged, no run, or of a newer format.
    """
    with open_run(path) as opened:
        facts = opened.facts
        return replace(
            facts,
            input=replace(facts.input, time=read_only(opened.input.time()), voltage=read_only(opened.input.values())),
            angle=replace(facts.angle, time=read_only(opened.angle.time()), angle=read_only(opened.angle.values())),
            file_sha256=file_sha256(Path(path)),
        )


def read_run_facts(path: Path | str) -> Run:
    """The run without its samples and without its sha256; raises TestFolderError as `read_run` does."""
    with open_run(path) as opened:
        return opened.facts


def _free_path(folder: TestFolder, run: Run) -> Path:
    path = folder.run(run.name)
    if path.exists():
        raise TestFolderError(f"{path}: exists already, and a raw run is never replaced; choose another name")
    path.parent.mkdir(parents=True, exist_ok=True)
    return path


def _datasets(run: Run) -> dict[str, tuple[NDArray[Any], str]]:
    return {
        "input/time": (run.input.time, unit_of(InputStream, "time")),
        "input/voltage": (run.input.voltage, unit_of(InputStream, "voltage")),
        "angle/time": (run.angle.time, unit_of(AngleStream, "time")),
        "angle/angle": (run.angle.angle, run.angle.angle_unit),
        **_lines(run),
    }


def _lines(run: Run) -> dict[str, tuple[NDArray[Any], str]]:
    if run.input.periodicity is None:
        return {}
    return {"input/lines": (run.input.periodicity.lines, unit_of(Periodicity, "lines"))}


def _attributes(folder: TestFolder, run: Run) -> dict[str, str | int | float | bool]:
    provenance = folder.provenance(format=RUN_FORMAT, version=1)  # the oldest that knows both time datasets
    computed_from = {origin.source: origin.sha256 for origin in run.origins if origin.sha256 is not None}
    attributes: dict[str, str | int | float | bool] = {
        **provenance,
        "computed_from": _text(computed_from),
        "name": run.name,
        "kind": run.kind,
        "common_clock": run.common_clock,
        "complete": run.complete,
        "simulated": run.simulated,
        "origins": _text([asdict(origin) for origin in run.origins]),
        "notes": _text(list(run.notes)),
        "input_hold": run.input.hold,
        "input_commanded": run.input.commanded,
        "angle_exposure": run.angle.exposure,
        "angle_stamp": run.angle.stamp,
    }
    if (periodicity := run.input.periodicity) is not None:
        attributes |= {
            "period": periodicity.period,
            "periodic_start": periodicity.start,
            "periodic_stop": periodicity.stop,
        }
    return attributes


def _text(value: Any) -> str:
    return json.dumps(value, ensure_ascii=False, allow_nan=False)
