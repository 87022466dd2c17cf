"""How does a run get into runs/NAME.h5 and back, with nothing lost?

Datasets input/time, input/voltage, angle/time, angle/angle and, for a periodic excitation,
input/lines, each with its unit; everything else in the attributes of the root, lists as JSON text.
A run is raw: it is written once, made read-only, and never written again.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import asdict, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from excitation.errors import ExcitationError
from excitation.hdf5_file import Hdf5Content, file_sha256, read_hdf5, write_hdf5
from freqid.errors import TestFolderError
from freqid.quantity import unit_of
from freqid.records import AngleStream, InputStream, Origin, Periodicity, Run
from freqid.test_folder import check_format, make_read_only

if TYPE_CHECKING:
    from freqid.test_folder import TestFolder

__all__ = ["RUN_FORMAT", "RUN_FORMAT_VERSION", "read_run", "write_run"]

RUN_FORMAT = "freqid run"
RUN_FORMAT_VERSION = 1


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
    path = folder.run(run.name)
    if path.exists():
        raise TestFolderError(f"{path}: exists already, and a raw run is never replaced; choose another name")
    path.parent.mkdir(parents=True, exist_ok=True)
    write_hdf5(path, datasets=_datasets(run), attributes=_attributes(folder, run))
    make_read_only(path)
    return path


def read_run(path: Path) -> Run:
    """The run in the file `path`, its arrays read-only, with the sha256 of the file.

    Raises
    ------
    TestFolderError
        The file is missing, damaged, no run, or of a newer format.
    """
    try:
        content = read_hdf5(path)
        check_format(path, content.attributes, format=RUN_FORMAT, version=RUN_FORMAT_VERSION)
        run = _run(content)
    except FileNotFoundError:
        others = ", ".join(sorted(other.stem for other in path.parent.glob("*.h5"))) or "none"
        raise TestFolderError(f"{path}: no such run; runs in this folder: {others}") from None
    except ExcitationError as error:
        raise TestFolderError(str(error)) from None
    except (KeyError, ValueError, TypeError) as error:
        raise TestFolderError(f"{path}: damaged run ({error}); import or record it again") from None
    return replace(run, file_sha256=file_sha256(path))


def _datasets(run: Run) -> dict[str, tuple[NDArray[Any], str]]:
    datasets = {
        "input/time": (run.input.time, unit_of(InputStream, "time")),
        "input/voltage": (run.input.voltage, unit_of(InputStream, "voltage")),
        "angle/time": (run.angle.time, unit_of(AngleStream, "time")),
        "angle/angle": (run.angle.angle, run.angle.angle_unit),
    }
    if run.input.periodicity is not None:
        datasets["input/lines"] = (run.input.periodicity.lines, unit_of(Periodicity, "lines"))
    return datasets


def _attributes(folder: TestFolder, run: Run) -> dict[str, str | int | float | bool]:
    provenance = folder.provenance(format=RUN_FORMAT, version=RUN_FORMAT_VERSION)
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


def _run(content: Hdf5Content) -> Run:
    attributes = content.attributes
    return Run(
        name=attributes["name"],
        kind=attributes["kind"],
        input=InputStream(
            **_pair(content, "input/time", "input/voltage"),
            hold=attributes["input_hold"],
            commanded=bool(attributes["input_commanded"]),
            periodicity=_periodicity(content),
        ),
        angle=AngleStream(
            **_pair(content, "angle/time", "angle/angle"),
            angle_unit=content.units["angle/angle"],
            exposure=float(attributes["angle_exposure"]),
            stamp=attributes["angle_stamp"],
        ),
        common_clock=bool(attributes["common_clock"]),
        origins=tuple(Origin(**origin) for origin in json.loads(attributes["origins"])),
        notes=tuple(json.loads(attributes["notes"])),
        complete=bool(attributes["complete"]),
        simulated=bool(attributes["simulated"]),
    )


def _pair(content: Hdf5Content, time: str, values: str) -> Mapping[str, NDArray[np.float64]]:
    arrays = {name: _array(content, name) for name in (time, values)}
    if arrays[time].shape != arrays[values].shape:
        raise ValueError(f"{time} has {arrays[time].size} samples, {values} has {arrays[values].size}")
    return {name.rpartition("/")[2]: array for name, array in arrays.items()}


def _periodicity(content: Hdf5Content) -> Periodicity | None:
    if "period" not in content.attributes:
        return None
    return Periodicity(
        period=float(content.attributes["period"]),
        lines=_array(content, "input/lines"),
        start=float(content.attributes["periodic_start"]),
        stop=float(content.attributes["periodic_stop"]),
    )


def _array(content: Hdf5Content, name: str) -> NDArray[np.float64]:
    array = np.asarray(content.datasets[name], dtype=np.float64)
    array.flags.writeable = False
    return array
