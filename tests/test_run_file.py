"""A run goes into its file and comes back with nothing lost, and a raw run is never replaced."""

from __future__ import annotations

import dataclasses
import hashlib
import os
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from excitation.hdf5_file import read_hdf5, write_hdf5
from freqid.errors import TestFolderError
from freqid.records import AngleStream, InputStream, Origin, Periodicity, Run
from freqid.run_file import read_run, write_run
from freqid.test_folder import TestFolder


@pytest.fixture
def folder(tmp_path: Path) -> TestFolder:
    path = tmp_path / "a test folder é"
    path.mkdir()
    return TestFolder(path)


def example(*, periodic: bool = True, **changes: Any) -> Run:
    rng = np.random.default_rng(5)
    angle = rng.normal(size=30)
    angle[3] = np.nan
    periodicity = Periodicity(period=0.02, lines=np.array([50.0, 150.0]), start=0.01, stop=0.09)
    run = Run(
        name="response-001",
        kind="response",
        input=InputStream(
            time=np.arange(100) / 1000, voltage=rng.normal(size=100), hold="smooth", commanded=False,
            periodicity=periodicity if periodic else None),
        angle=AngleStream(
            time=np.sort(rng.uniform(0, 0.1, 30)), angle=angle, angle_unit="rad", exposure=0.004, stamp="middle"),
        common_clock=True,
        origins=(Origin(source="vane é.csv", sha256="ab" * 32, content="columns Zeit, Winkel"),
                 Origin(source="simulated rig", sha256=None, content="input")),
        notes=("2 wraps undone", "unit ° from the header"),
        complete=False,
        simulated=True,
    )  # fmt: skip
    return dataclasses.replace(run, **changes)


def same(one: Any, other: Any) -> bool:
    """Equal in every field, to the last bit, NaN equal to NaN."""
    if dataclasses.is_dataclass(one):
        names = [field.name for field in dataclasses.fields(one)]
        return type(one) is type(other) and all(same(getattr(one, name), getattr(other, name)) for name in names)
    if isinstance(one, np.ndarray):
        return one.dtype == other.dtype and np.array_equal(one, other, equal_nan=True)
    return type(one) is type(other) and bool(one == other)


@pytest.mark.parametrize("periodic", [True, False])
def test_every_field_comes_back(folder: TestFolder, periodic: bool) -> None:
    """All fields of a run return to the last bit, periodicity or none, and the sha256 of the file is added."""
    run = example(periodic=periodic)
    path = write_run(folder, run)
    back = read_run(path)
    assert path == folder.run("response-001")
    assert back.file_sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert same(dataclasses.replace(back, file_sha256=None), run)


def test_empty_notes_and_a_step_run_come_back(folder: TestFolder) -> None:
    """A plain, complete step run without notes or origins returns as it was."""
    run = example(name="step-001", kind="step", notes=(), origins=(), complete=True, simulated=False)
    assert same(dataclasses.replace(read_run(write_run(folder, run)), file_sha256=None), run)


def test_arrays_read_are_read_only(folder: TestFolder) -> None:
    """What was measured cannot be changed in memory."""
    back = read_run(write_run(folder, example()))
    with pytest.raises(ValueError, match="read-only"):
        back.angle.angle[0] = 0.0


def test_file_says_units_provenance_and_origin(folder: TestFolder) -> None:
    """Each dataset has its unit, the file its format and the sha256 of the log it was made from; it is read-only."""
    path = write_run(folder, example())
    content = read_hdf5(path)
    assert content.units == {"input/time": "s", "input/voltage": "V", "input/lines": "Hz", "angle/time": "s",
                             "angle/angle": "rad"}  # fmt: skip
    assert content.attributes["format"] == "freqid run" and content.attributes["format_version"] == 1
    assert content.attributes["computed_from"] == '{"vane é.csv": "%s"}' % ("ab" * 32)
    assert {"freqid_version", "created"} <= content.attributes.keys()
    assert path.stat().st_mode & 0o222 == 0


def test_raw_run_is_never_replaced(folder: TestFolder) -> None:
    """Writing a run under a name that is taken is refused, and the first stays."""
    path = write_run(folder, example())
    before = path.read_bytes()
    with pytest.raises(TestFolderError, match="a raw run is never replaced"):
        write_run(folder, example(notes=()))
    assert path.read_bytes() == before


def test_failed_writing_leaves_nothing(folder: TestFolder, monkeypatch: pytest.MonkeyPatch) -> None:
    """When the last step of the writing fails, no run and no temporary file is left."""

    def refuse(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", refuse)
    with pytest.raises(OSError, match="No space left"):
        write_run(folder, example())
    assert os.listdir(folder.runs) == []


def test_missing_run_lists_the_others(folder: TestFolder) -> None:
    """A run that is not there is refused with the names of those that are."""
    write_run(folder, example())
    with pytest.raises(TestFolderError, match=r"response-002\.h5: no such run; runs in this folder: response-001"):
        read_run(folder.run("response-002"))


def test_damaged_runs_are_told_in_one_line(folder: TestFolder) -> None:
    """Bytes that are no HDF5, a foreign file, a newer version, missing data and unequal lengths are each refused."""
    source = read_hdf5(write_run(folder, example()))
    datasets = {name: (array, source.units[name]) for name, array in source.datasets.items()}
    cases = {
        "not HDF5": None,
        "its format is 'freqid response'": (datasets, source.attributes | {"format": "freqid response"}),
        "freqid run version 3": (datasets, source.attributes | {"format_version": 3}),
        "damaged run": ({name: pair for name, pair in datasets.items() if name != "angle/angle"}, source.attributes),
        "angle/angle has 29": (datasets | {"angle/angle": (np.zeros(29), "rad")}, source.attributes),
        "damaged run (": (datasets, source.attributes | {"origins": "[{"}),
    }
    for expected, content in cases.items():
        path = folder.runs / "damaged.h5"
        path.unlink(missing_ok=True)
        if content is None:
            path.write_bytes(b"this is no HDF5 file")
            expected = "not a readable HDF5 file"
        else:
            write_hdf5(path, datasets=content[0], attributes=content[1])
        with pytest.raises(TestFolderError) as caught:
            read_run(path)
        assert expected in str(caught.value) and "damaged.h5" in str(caught.value)
        assert "\n" not in str(caught.value)
