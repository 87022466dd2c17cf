"""What does the file of a run hold, and how is it read without holding it whole?

`open_run` gives the run without its samples and both streams by slices. A stream of even rate may have no time
dataset: the attributes STREAM_start (s) and STREAM_sample_rate (Hz) say the instant of sample n,
start + n / sample_rate. `freqid.run_file` writes and reads whole runs.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from excitation.errors import ExcitationError
from excitation.hdf5_file import OpenHdf5, open_hdf5
from freqid.errors import TestFolderError
from freqid.records import AngleStream, InputStream, Origin, Periodicity, Run
from freqid.test_folder import check_format

__all__ = ["RUN_FORMAT", "RUN_FORMAT_VERSION", "EvenRate", "OpenRun", "StoredStream", "open_run"]

Floats = NDArray[np.float64]

RUN_FORMAT = "freqid run"
RUN_FORMAT_VERSION = 2  # the newest; a file with both time datasets is of version 1
VALUES = {"input": "voltage", "angle": "angle"}  # dataset of each stream's samples


@dataclass(frozen=True, slots=True, kw_only=True)
class EvenRate:
    """The clock of evenly taken samples: sample n belongs to the instant start + n / sample_rate, in s and Hz."""

    sample_rate: float
    start: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class StoredStream:
    """One stream of an open run, read by slices. `rate` is None where every sample has its own stamp."""

    name: str
    size: int
    rate: EvenRate | None
    file: OpenHdf5

    def time(self, begin: int = 0, stop: int | None = None) -> Floats:
        """Stamps of the samples begin to stop, s."""
        if self.rate is None:
            return np.asarray(self._block("time", begin, stop), dtype=np.float64)
        order = np.arange(*slice(begin, stop).indices(self.size))
        return self.rate.start + order / self.rate.sample_rate

    def values(self, begin: int = 0, stop: int | None = None) -> NDArray[Any]:
        """Samples begin to stop, in V or the angle unit, of the number type they are kept in."""
        return self._block(VALUES[self.name], begin, stop)

    def _block(self, dataset: str, begin: int, stop: int | None) -> NDArray[Any]:
        try:
            return self.file.block(f"{self.name}/{dataset}", begin, stop)
        except ExcitationError as error:
            raise TestFolderError(str(error)) from None


@dataclass(frozen=True, slots=True, kw_only=True)
class OpenRun:
    """A run whose file is open: `facts` is the run without its samples (the arrays are empty), then both streams."""

    facts: Run
    input: StoredStream
    angle: StoredStream


@contextmanager
def open_run(path: Path | str) -> Iterator[OpenRun]:
    """Open the run in the file `path` to read its streams by slices; closed when the block ends.

    Raises
    ------
    TestFolderError
        The file is missing, damaged, no run, or of a newer format; also where samples cannot be read inside the block.
    """
    path = Path(path)
    if not path.is_file():
        others = ", ".join(sorted(other.stem for other in path.parent.glob("*.h5"))) or "none"
        raise TestFolderError(f"{path}: no such run; runs in this folder: {others}")
    with ExitStack() as closing:
        try:
            file = closing.enter_context(open_hdf5(path))
        except ExcitationError as error:
            raise TestFolderError(str(error)) from None
        yield _opened(path, file)


def _opened(path: Path, file: OpenHdf5) -> OpenRun:
    check_format(path, file.attributes, format=RUN_FORMAT, version=RUN_FORMAT_VERSION)
    try:
        return OpenRun(facts=_facts(file), input=_stream(file, "input"), angle=_stream(file, "angle"))
    except (KeyError, ValueError, TypeError, ExcitationError) as error:
        raise TestFolderError(f"{path}: damaged run ({error}); import or record it again") from None


def _facts(file: OpenHdf5) -> Run:
    attributes = file.attributes
    return Run(
        name=attributes["name"],
        kind=attributes["kind"],
        input=InputStream(
            time=read_only(()),
            voltage=read_only(()),
            hold=attributes["input_hold"],
            commanded=bool(attributes["input_commanded"]),
            periodicity=_periodicity(file),
        ),
        angle=AngleStream(
            time=read_only(()),
            angle=read_only(()),
            angle_unit=file.unit("angle/angle"),
            exposure=float(attributes["angle_exposure"]),
            stamp=attributes["angle_stamp"],
        ),
        common_clock=bool(attributes["common_clock"]),
        origins=tuple(Origin(**origin) for origin in json.loads(attributes["origins"])),
        notes=tuple(json.loads(attributes["notes"])),
        complete=bool(attributes["complete"]),
        simulated=bool(attributes["simulated"]),
    )


def _stream(file: OpenHdf5, name: str) -> StoredStream:
    values, time = f"{name}/{VALUES[name]}", f"{name}/time"
    size = file.size(values)
    rate = None
    if f"{name}_sample_rate" in file.attributes:
        rate = EvenRate(
            sample_rate=float(file.attributes[f"{name}_sample_rate"]), start=float(file.attributes[f"{name}_start"])
        )
        if not rate.sample_rate > 0:
            raise ValueError(f"{name}_sample_rate is {rate.sample_rate:g} Hz")
    elif file.size(time) != size:
        raise ValueError(f"{time} has {file.size(time)} samples, {values} has {size}")
    return StoredStream(name=name, size=size, rate=rate, file=file)


def _periodicity(file: OpenHdf5) -> Periodicity | None:
    if "period" not in file.attributes:
        return None
    return Periodicity(
        period=float(file.attributes["period"]),
        lines=read_only(file.block("input/lines")),
        start=float(file.attributes["periodic_start"]),
        stop=float(file.attributes["periodic_stop"]),
    )


def read_only(values: Any) -> Floats:
    """The values as float64, not to be written to."""
    array = np.asarray(values, dtype=np.float64)
    array.flags.writeable = False
    return array
