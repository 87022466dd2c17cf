"""How does a person work with a sound interface? A test folder, the command line, and nothing else.

`SoundSession` prepares a folder for a rig of these tests and runs `freqid`; `Capture` is one that still runs, so that
something can happen to it.
"""

from __future__ import annotations

import re
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import psutil
from jack_rig import JackRig
from numpy.typing import NDArray

from freqid.rig_template import rig_sheet_text

__all__ = ["Capture", "SoundSession", "largest_step", "onset"]

FREQID = (sys.executable, "-c", "import sys; from freqid.cli import main; sys.exit(main())")
CHECKOUT = Path(__file__).resolve().parents[2]
STREAM_PROCESS = "freqid.capture.sound.stream_process"
PATIENCE = 120.0  # s for a whole run of the program on a busy machine


def rig_sheet(sample_rate: int, **changes: str) -> str:
    """The built-in vane behind a sound interface; `changes` replace the values of keys, for every key of that name."""
    values = {"sample_rate": f"{sample_rate}.0", "hold": '"smooth"', "exposure": "0.0", **changes}
    text = rig_sheet_text()
    for key, value in values.items():
        text, found = re.subn(rf"(?m)^(?:# )?{key} = \S*", f"{key} = {value}", text)
        if not found:
            raise KeyError(key)
    return text


@dataclass(slots=True, kw_only=True)
class SoundSession:
    """A test folder and the surroundings in which `freqid` works on it."""

    folder: Path
    environment: Mapping[str, str]
    said: list[str] = field(default_factory=list)

    def new(self, sample_rate: int, **changes: str) -> None:
        """Make the folder with `freqid new` and fill in its sheet."""
        self.do("new")
        (self.folder / "rig.toml").write_text(rig_sheet(sample_rate, **changes), encoding="utf-8")

    def copy_plan(self, other: SoundSession) -> None:
        """Make the folder with the rig sheet and the profiles of another one."""
        self.folder.mkdir(parents=True)
        for name in ("rig.toml", "profile.h5", "profile.json", "step_profile.h5", "step_profile.json"):
            if (other.folder / name).exists():
                shutil.copy(other.folder / name, self.folder / name)

    def do(self, verb: str, *options: str, status: int = 0) -> str:
        """Run `freqid VERB FOLDER options` to its end; what it printed as results."""
        done = subprocess.run(
            self.command(verb, *options),
            env=self.surroundings(),
            cwd=self.folder.parent,
            capture_output=True,
            text=True,
            encoding="utf-8",
            timeout=PATIENCE,
        )
        self.said.append(done.stderr)
        assert done.returncode == status, f"freqid {verb} {' '.join(options)}: {done.returncode}\n{done.stderr}"
        return done.stdout

    def command(self, verb: str, *options: str) -> list[str]:
        """The words of `freqid VERB FOLDER options`."""
        return [*FREQID, verb, str(self.folder), *options]

    def start(self, *options: str, **environment: str) -> Capture:
        """`freqid capture FOLDER options`, not waited for."""
        output = self.folder.parent / f"{self.folder.name}.said"
        with open(output, "wb") as said:
            process = subprocess.Popen(
                self.command("capture", *options),
                env={**self.surroundings(), **environment},
                cwd=self.folder.parent,
                stdin=subprocess.DEVNULL,
                stdout=said,
                stderr=subprocess.STDOUT,
                start_new_session=True,
            )
        return Capture(process=process, output=output)

    def runs(self) -> list[Path]:
        """The run files, oldest first."""
        return sorted((self.folder / "runs").glob("*.h5"))

    def surroundings(self) -> dict[str, str]:
        """Environment variables of the program."""
        return {**self.environment, "PYTHONPATH": str(CHECKOUT), "OMP_NUM_THREADS": "1"}


@dataclass(slots=True, kw_only=True)
class Capture:
    """A `freqid capture` that runs, in a process group of its own."""

    process: subprocess.Popen[bytes]
    output: Path

    def stream_process(self) -> psutil.Process:
        """The child in which the stream runs.

        Raises
        ------
        LookupError
            There is none (any more).
        """
        for child in psutil.Process(self.process.pid).children(recursive=True):
            if STREAM_PROCESS in child.cmdline():
                return child
        raise LookupError(f"no stream process: {self.text()}")

    def wait_until_driven(self, rig: JackRig, since: int, seconds: float) -> None:
        """Until the vane has been driven for `seconds` after the frame `since` of the record.

        Raises
        ------
        TimeoutError
            It has not been after two minutes, or the program has ended.
        """
        end = time.monotonic() + PATIENCE
        while time.monotonic() < end and self.process.poll() is None:
            first = onset(rig.sent()[since:])
            if first is not None and rig.frames_sent() - since - first > seconds * rig.plant.sample_rate:
                return
            time.sleep(0.02)
        raise TimeoutError(f"the vane is not driven: {self.text()}")

    def wait(self, timeout: float = PATIENCE) -> int:
        """Exit status; a program that does not end in time is killed with its children, and TimeoutExpired raised."""
        try:
            return self.process.wait(timeout)
        except subprocess.TimeoutExpired:
            self.kill_all()
            raise

    def kill_all(self) -> None:
        """The program and its children, however they are."""
        try:
            family = psutil.Process(self.process.pid).children(recursive=True)
        except psutil.NoSuchProcess:
            family = []
        for child in family:
            child.kill()
        if self.process.poll() is None:
            self.process.send_signal(signal.SIGKILL)
            self.process.wait()

    def text(self) -> str:
        """What it printed so far."""
        return self.output.read_text(encoding="utf-8", errors="replace")

    def last_line(self) -> str:
        """The sentence with which it ended."""
        lines = [line.strip() for line in re.split(r"[\r\n]+", self.text()) if line.strip()]
        return lines[-1] if lines else ""


def onset(sent: NDArray[np.float64]) -> int | None:
    """Index of the first sample that is not zero."""
    found = np.flatnonzero(sent)
    return int(found[0]) if len(found) else None


def largest_step(samples: NDArray[np.float64]) -> float:
    """Largest difference of neighbours."""
    return float(np.max(np.abs(np.diff(samples)), initial=0.0))
