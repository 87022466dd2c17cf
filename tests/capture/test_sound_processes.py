"""Processes that are told to end, killed or stopped while they record: the rig comes to rest, the data stay."""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from sound_vane import RATE, vane_on_sound

from excitation.profile_file import read_profile
from freqid.capture.sound.journal import journal_paths, read_journal
from freqid.capture.sound.messages import Block
from freqid.capture.sound.recovery import recover_recordings
from freqid.run_file import read_run
from freqid.test_folder import TestFolder

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="the signals sent here are POSIX")
ROUNDING = 10 * 2.0**-23  # V: float32 digits of 10 V


@pytest.fixture(scope="module")
def designed(tmp_path_factory: pytest.TempPathFactory) -> TestFolder:
    """A folder with a profile, to be copied."""
    return vane_on_sound(tmp_path_factory.mktemp("sound"))


@pytest.fixture
def folder(designed: TestFolder, tmp_path: Path) -> TestFolder:
    """A copy."""
    copy = TestFolder(tmp_path / designed.path.name)
    shutil.copytree(designed.path, copy.path)
    return copy


def recorded_frames(folder: TestFolder) -> int:
    """Frames in the journal so far."""
    for path in journal_paths(folder.runs) if folder.runs.is_dir() else []:
        return sum(len(entry.frames) for entry in read_journal(path) if isinstance(entry, Block))
    return 0


def recording(folder: TestFolder) -> subprocess.Popen[str]:
    """freqid capture in a process of its own, in real time, half a second into the profile."""
    environment = {name: value for name, value in os.environ.items() if name != "FREQID_SIMULATED_PACE"}
    process = subprocess.Popen(
        [sys.executable, "-c", "import sys; from freqid.cli import main; sys.exit(main(sys.argv[1:]))",
         "capture", str(folder.path), "--device", "simulated"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, encoding="utf-8", env=environment,
        start_new_session=True,
    )  # fmt: skip
    end = time.monotonic() + 60
    while recorded_frames(folder) < 1.5 * RATE:
        assert time.monotonic() < end and process.poll() is None
        time.sleep(0.05)
    return process


@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM", "SIGHUP"])
def test_request_to_end_ramps_down_and_keeps_the_run(name: str, folder: TestFolder) -> None:
    """Status 1, one line with the reason, a readable run, the voltage at rest; a second request changes nothing."""
    process = recording(folder)
    process.send_signal(getattr(signal, name))
    time.sleep(0.1)
    process.send_signal(signal.SIGINT)
    _, err = process.communicate(timeout=60)
    assert process.returncode == 1
    last = err.splitlines()[-1]
    assert last.startswith(f"freqid: interrupted ({name}); kept ") and "runs/response-001.h5" in last
    run = read_run(folder.run("response-001"))
    voltage = run.input.voltage
    assert not run.complete and np.max(np.abs(voltage[-round(0.4 * RATE) :])) <= ROUNDING
    largest = np.max(np.abs(np.diff(read_profile(folder.profile_h5).voltage)))
    assert np.max(np.abs(np.diff(voltage))) <= largest + 2 * ROUNDING
    assert not list(folder.runs.glob(".*"))


def test_killed_recorder_leaves_a_journal_that_is_recovered(folder: TestFolder) -> None:
    """While it lives the journal is left alone; afterwards it becomes a run, marked, and the journal is gone."""
    process = recording(folder)
    assert recover_recordings(folder) == ()
    process.kill()
    process.communicate()
    seen = recorded_frames(folder)
    (recovered,) = recover_recordings(folder)
    assert recovered.folded is not None and "the recording process was ended" in recovered.message
    run = read_run(folder.run("response-001"))
    assert not run.complete and run.angle.angle.size == seen - round(0.75 * RATE)
    assert not list(folder.runs.glob(".*")) and recover_recordings(folder) == ()


@pytest.mark.parametrize(
    ("number", "expected"),
    [("SIGKILL", "the stream process ended by itself (signal 9)"),
     ("SIGSTOP", "the stream process gave no sign of life for 2 s")],
)  # fmt: skip
def test_stream_process_that_dies_or_hangs_is_told(number: str, expected: str, folder: TestFolder) -> None:
    """Killed or stopped, the recording ends, the run is kept, and nothing hangs."""
    process = recording(folder)
    heading = next(read_journal(journal_paths(folder.runs)[0]))
    assert isinstance(heading, dict)
    os.kill(heading["stream_process"], getattr(signal, number))
    _, err = process.communicate(timeout=60)
    assert process.returncode == 1 and expected in err.splitlines()[-1]
    assert not read_run(folder.run("response-001")).complete
