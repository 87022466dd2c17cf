"""A long run goes into its file block by block and is read by slices, the same as a whole one."""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from freqid.errors import TestFolderError
from freqid.records import AngleStream, InputStream, Origin, Periodicity, Run
from freqid.run_file import EvenRate, open_run, read_run, read_run_facts, write_run, write_run_in_blocks
from freqid.test_folder import TestFolder

RATE = EvenRate(sample_rate=48_000.0, start=0.25)
SAMPLES = 700_000


@pytest.fixture
def folder(tmp_path: Path) -> TestFolder:
    path = tmp_path / "long é"
    path.mkdir()
    return TestFolder(path)


def facts() -> Run:
    return Run(
        name="response-001",
        kind="response",
        input=InputStream(
            time=np.empty(0), voltage=np.empty(0), hold="smooth", commanded=False,
            periodicity=Periodicity(period=1.0, lines=np.array([3.0, 5.0]), start=0.0, stop=14.0)),
        angle=AngleStream(time=np.empty(0), angle=np.empty(0), angle_unit="deg", exposure=0.0, stamp="end"),
        common_clock=True,
        origins=(Origin(source="sound interface", sha256=None, content="voltage and angle"),),
        notes=("device X",),
    )  # fmt: skip


def streams() -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(3)
    return tuple(rng.standard_normal((2, SAMPLES)).astype(np.float32))


def blocks(size: int) -> Iterator[tuple[np.ndarray, np.ndarray]]:
    voltage, angle = streams()
    for begin in range(0, SAMPLES, size):
        yield voltage[begin : begin + size], angle[begin : begin + size]


@pytest.mark.parametrize("size", [65_536, 300_001, SAMPLES])
def test_blocks_come_back_whole(folder: TestFolder, size: int) -> None:
    """Blocks of any length come back as one run: samples to the last bit, stamps start + n / sample rate."""
    path = write_run_in_blocks(folder, facts(), blocks(size), rate=RATE, samples=SAMPLES)
    run = read_run(path)
    voltage, angle = streams()
    np.testing.assert_array_equal(run.input.voltage, voltage)
    np.testing.assert_array_equal(run.angle.angle, angle)
    # both expressions round twice: to within two units in the last place of 15 s
    np.testing.assert_allclose(run.angle.time, 0.25 + np.arange(SAMPLES) / 48_000, rtol=0, atol=4e-15)
    assert run.angle.angle_unit == "deg" and run.notes == ("device X",) and run.input.periodicity is not None
    assert path.stat().st_mode & 0o222 == 0
    # 4 bytes a sample; the last chunk of 2^18 rows of each stream may be empty but for one row
    assert path.stat().st_size <= 2 * 4 * (SAMPLES + 2**18) + 100_000


def test_slices_are_slices_of_the_whole(folder: TestFolder) -> None:
    """Streams of an open run are read by slices of samples and stamps, across chunks and to the end."""
    path = write_run_in_blocks(folder, facts(), blocks(100_000), rate=RATE, samples=SAMPLES)
    voltage, angle = streams()
    with open_run(path) as opened:
        assert (opened.input.size, opened.angle.size) == (SAMPLES, SAMPLES)
        assert opened.input.rate == RATE
        assert opened.facts.kind == "response" and len(opened.facts.input.voltage) == 0
        for begin, stop in ((0, 5), (262_100, 262_200), (699_990, None), (SAMPLES, None)):
            np.testing.assert_array_equal(opened.input.values(begin, stop), voltage[begin:stop])
            np.testing.assert_array_equal(opened.angle.values(begin, stop), angle[begin:stop])
            expected = 0.25 + np.arange(SAMPLES)[begin:stop] / 48_000
            np.testing.assert_allclose(opened.angle.time(begin, stop), expected, rtol=0, atol=4e-15)


def test_run_with_its_own_stamps_is_read_by_slices_too(folder: TestFolder) -> None:
    """A run written whole, stamps and all, opens the same way and has no even rate."""
    time = np.array([0.0, 0.1, 0.35, 0.4])
    known = facts()
    run = Run(
        name="response-001",
        kind="response",
        input=InputStream(time=time, voltage=time**2, hold="smooth", commanded=False),
        angle=known.angle,
        common_clock=True,
    )
    with open_run(write_run(folder, run)) as opened:
        assert opened.input.rate is None and opened.angle.size == 0
        np.testing.assert_array_equal(opened.input.time(1, 3), time[1:3])
        np.testing.assert_array_equal(opened.input.values(2), time[2:] ** 2)


def test_facts_alone_are_the_run_without_samples(folder: TestFolder) -> None:
    """The facts of a stored run are those it was written with, its arrays empty."""
    path = write_run_in_blocks(folder, facts(), blocks(SAMPLES), rate=RATE, samples=SAMPLES)
    found = read_run_facts(path)
    assert (found.name, found.complete, found.notes, found.origins) == (
        "response-001", True, ("device X",), facts().origins)  # fmt: skip
    assert len(found.angle.angle) == len(found.input.time) == 0


def test_failing_source_leaves_nothing(folder: TestFolder) -> None:
    """Where the blocks end in an error, the error comes through and no file stays."""

    def broken() -> Iterator[tuple[np.ndarray, np.ndarray]]:
        yield np.zeros(10), np.zeros(10)
        raise ConnectionError("the source ended")

    with pytest.raises(ConnectionError, match="the source ended"):
        write_run_in_blocks(folder, facts(), broken(), rate=RATE, samples=20)
    with pytest.raises(ValueError, match=r"\[10, 9\] rows"):
        write_run_in_blocks(folder, facts(), iter([(np.zeros(10), np.zeros(9))]), rate=RATE, samples=10)
    assert os.listdir(folder.runs) == []


def test_full_disk_is_told_before_writing(folder: TestFolder, monkeypatch: pytest.MonkeyPatch) -> None:
    """Where the disk has less room than the run needs, nothing is written and the error says how much is missing."""
    monkeypatch.setattr(shutil, "disk_usage", lambda _: SimpleNamespace(free=5_000_000))
    with pytest.raises(OSError, match=r"6 MB are needed, 5 MB are free"):
        write_run_in_blocks(folder, facts(), blocks(SAMPLES), rate=RATE, samples=SAMPLES)
    assert os.listdir(folder.runs) == []


def test_stored_run_is_never_replaced(folder: TestFolder) -> None:
    """A run written in blocks does not replace one of the same name."""
    write_run_in_blocks(folder, facts(), blocks(SAMPLES), rate=RATE, samples=SAMPLES)
    with pytest.raises(TestFolderError, match="never replaced"):
        write_run_in_blocks(folder, facts(), blocks(SAMPLES), rate=RATE, samples=SAMPLES)


def test_own_errors_pass_through_an_open_run(folder: TestFolder) -> None:
    """An error raised while a run is open is not taken for a fault of its file."""
    path = write_run_in_blocks(folder, facts(), blocks(SAMPLES), rate=RATE, samples=SAMPLES)
    with pytest.raises(FileNotFoundError, match="another"), open_run(path):
        raise FileNotFoundError("another")
