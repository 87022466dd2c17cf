"""Does an hour of capture need more memory than a minute, and how much of the processor does it take?

The real program plays the periods of a short profile for an hour at 48 kHz and records voltage and angle, through
PortAudio on a JACK server with a vane behind it that runs as fast as its clients can (freewheel), or in real time with
--real-time. Printed at regular steps: what has been recorded, resident memory of the program and of its stream process;
at the end the processor time of both over the time recorded, the size of the run file beside the expected one, and
whether the run verified itself.

    python tests/benchmarks/long_capture.py [--seconds 3600] [--real-time]

An hour takes 6 GB of disk in the temporary folder (TMPDIR) while it runs.
"""

from __future__ import annotations

import argparse
import math
import os
import sys
import tempfile
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import psutil

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "capture"))

from jack_rig import jack_rig, what_is_missing
from plant_client import PlantSettings
from sound_session import Capture, SoundSession

from excitation.profile_file import read_profile
from freqid.run_file import read_run_facts

RATE = 48000  # Hz


@dataclass(frozen=True, slots=True, kw_only=True)
class Sample:
    """The state of the capture: s recorded, MB resident and s of processor time of program and stream process."""

    recorded: float
    memory: tuple[float, float]
    processor: tuple[float, float]


def main() -> int:
    """Capture, print, judge."""
    arguments = _arguments()
    if (missing := what_is_missing()) is not None:
        print(missing)
        return 1
    with (
        tempfile.TemporaryDirectory(prefix="long capture ") as above,
        jack_rig(PlantSettings(sample_rate=RATE, noise=0.3), recorder=False) as rig,
    ):
        session = SoundSession(folder=Path(above) / "an hour", environment=rig.environment)
        session.new(RATE)
        session.do("excite", "--duration", "12", "--band", "1", "8", "--seed", "1")
        if not arguments.real_time:
            rig.freewheel(True)
        begun = time.monotonic()
        period = (read_profile(session.folder / "profile.h5").period_samples or RATE) / RATE
        capture = session.start("--device", "vane", "--armed", "--periods", str(math.ceil(arguments.seconds / period)))
        samples = list(_followed(capture, session.folder / "runs"))
        status = capture.wait(1800.0)
        _print_summary(samples, session, time.monotonic() - begun)
        print(f"exit status {status}: {capture.last_line()}")
        return status


def _followed(capture: Capture, runs: Path) -> Iterator[Sample]:
    """A sample at every tenth of a second, printed where twice as much has been recorded as before."""
    columns = ("recorded, s", "program, MB", "stream, MB", "program, CPU s", "stream, CPU s")
    print("".join(f"{column:>15}" for column in columns), flush=True)
    program, printed = psutil.Process(capture.process.pid), 1.0
    while capture.process.poll() is None:
        time.sleep(0.1)
        try:
            stream = capture.stream_process()
            sample = _sample(program, stream, runs)
        except (LookupError, psutil.NoSuchProcess, psutil.ZombieProcess):
            sample = _sample(program, None, runs) if program.is_running() else None
        if sample is None:
            continue
        yield sample
        if sample.recorded > 2 * printed:
            printed = sample.recorded
            _print(sample)


def _sample(program: psutil.Process, stream: psutil.Process | None, runs: Path) -> Sample | None:
    try:
        processes = [process for process in (program, stream) if process is not None]
        memory = [process.memory_info().rss / 1e6 for process in processes]
        spent = [sum(process.cpu_times()[:2]) for process in processes]
    except (psutil.NoSuchProcess, psutil.ZombieProcess):
        return None
    recorded = sum(path.stat().st_size for path in runs.glob(".*.journal")) / (12 * RATE) if runs.is_dir() else 0.0
    last = (memory[1], spent[1]) if len(memory) > 1 else (0.0, 0.0)
    return Sample(recorded=recorded, memory=(memory[0], last[0]), processor=(spent[0], last[1]))


def _print(sample: Sample) -> None:
    print(
        "".join(f"{value:>15.1f}" for value in (sample.recorded, *sample.memory, *sample.processor)),
        flush=True,
    )


def _print_summary(samples: list[Sample], session: SoundSession, elapsed: float) -> None:
    recorded = max(sample.recorded for sample in samples)
    while_recording = [sample for sample in samples if sample.recorded > 0 and sample.memory[1] > 0]
    for number, name in enumerate(("program", "stream process")):
        memory = np.array([sample.memory[number] for sample in while_recording])
        tenth = memory[: max(1, len(memory) // 10)].max()
        spent = max(sample.processor[number] for sample in while_recording)
        print(
            f"{name}, while recording: {tenth:.1f} MB at most in the first tenth, {memory.max():.1f} MB in the whole;"
            f" {100 * spent / recorded:.2f} % of one processor in real time"
        )
    print(
        f"program, to the end (verifying and writing the run): {max(sample.memory[0] for sample in samples):.1f} MB,"
        f" {max(sample.processor[0] for sample in samples):.1f} s of processor time"
    )
    file = session.runs()[-1]
    facts = read_run_facts(file)
    print(
        f"{recorded:.1f} s recorded in {elapsed:.1f} s; {file.name}: {file.stat().st_size / 1e6:.1f} MB,"
        f" {file.stat().st_size / (recorded * RATE):.3f} bytes a frame of two channels (float32: 8);"
        f" complete {facts.complete}"
    )
    for note in facts.notes:
        print(f"  {note}")


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seconds", type=float, default=3600.0)
    parser.add_argument("--real-time", action="store_true")
    return parser.parse_args()


if __name__ == "__main__":
    os.environ.setdefault("OMP_NUM_THREADS", "1")
    sys.exit(main())
