"""How fast is an estimate, of what size of record, in how much memory, and does its time grow with the record alone?

(a) Ten minutes at 60 frames/s and 200 lines: import and estimate, computing time once everything is loaded, beside the
    plain script of `accuracy.py`; then `freqid estimate` as a whole process.
(b) One hour of two channels at 48 kHz, written by the benchmark: time of the whole estimate over the time of reading
    the same file once with h5py, memory at the peak. Each in a process of its own, both with the file in the system's
    memory already, so that the disk does not flatter the ratio.
(c) Ten minutes, one hour, four hours at 60 frames/s on separate clocks.

Times are those of the clock on the wall and, in brackets, of the processor: on a busy machine the second counts.

    python tests/benchmarks/speed.py [a] [b] [c] [--seconds 3600]
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from accuracy import LIMITS, plain_script

from excitation import MultisineSettings, Profile, design_multisine
from excitation.export import write_profile
from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor, input_from_profile
from freqid.estimate.identification import identify
from freqid.records import AngleStream, InputStream, Periodicity, Run
from freqid.run_file import EvenRate, read_run, write_run_in_blocks
from freqid.second_order import SecondOrder
from freqid.stages.estimate import estimate_folder
from freqid.stages.import_logs import ImportSettings, TwoLogs, import_logs
from freqid.stages.new import create_folder
from freqid.test_folder import TestFolder

VANE = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
SENSOR = SimulatedSensor(sample_rate=60.0, exposure=0.008, noise=0.3, jitter=0.001, lost_frames=0.02,
                         clock_ratio=1.0002, clock_offset=-0.35)  # fmt: skip
SOUND_RATE = 48_000.0

READ_ONCE = """
import sys, time, h5py, numpy as np
begin = time.perf_counter(), time.process_time()
with h5py.File(sys.argv[1]) as file:
    for name in ("input/voltage", "angle/angle"):
        values = file[name]
        block = np.empty(1 << 20, values.dtype)
        for start in range(0, len(values), len(block)):
            stop = min(start + len(block), len(values))
            values.read_direct(block, np.s_[start:stop], np.s_[: stop - start])
print(time.perf_counter() - begin[0], time.process_time() - begin[1])
"""
ESTIMATE = """
import sys, time
from pathlib import Path
from freqid.stages.estimate import estimate_folder
from freqid.test_folder import TestFolder
import h5py, scipy.special, scipy.linalg, freqid.estimate.result_files
begin = time.perf_counter(), time.process_time()
estimate_folder(TestFolder(Path(sys.argv[1])))
taken = time.perf_counter() - begin[0], time.process_time() - begin[1]
import resource
print(*taken, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024)
"""


@dataclass(frozen=True)
class Taken:
    """Seconds on the wall and of the processor."""

    wall: float
    processor: float

    def __str__(self) -> str:
        return f"{self.wall:.2f} s ({self.processor:.2f} s)"


def timed(work: Callable[[], Any]) -> tuple[Any, Taken]:
    """What the work returns, and how long it took."""
    wall, processor = time.perf_counter(), time.process_time()
    result = work()
    return result, Taken(time.perf_counter() - wall, time.process_time() - processor)


def profile_of(seconds: float) -> Profile:
    """A multisine of 200 lines."""
    return design_multisine(
        MultisineSettings(
            band=(0.3, 12.42), duration=seconds, period=min(33.0, seconds / 3), sample_rate=1000.0,
            limits=LIMITS, rigs=(VANE,), grid="odd",
        )
    )  # fmt: skip


def logged_folder(path: Path, seconds: float) -> tuple[TestFolder, Path]:
    """A folder with the profile that was played, and the camera's log as CSV."""
    profile = profile_of(seconds)
    folder = create_folder(path)
    sheet = folder.rig.read_text(encoding="utf-8").replace("exposure = 0.004", "exposure = 0.008")
    folder.rig.write_text(sheet, encoding="utf-8")
    write_profile(profile, folder.path, full_scale=10.0)
    run = SimulatedRig(model=VANE, sensor=SENSOR).run(
        input_from_profile(profile), kind="response", name="log", rng=np.random.default_rng(1)
    )
    log = folder.path / "camera.csv"
    columns = np.stack([run.angle.time, run.angle.angle], axis=1)
    np.savetxt(log, columns, delimiter=",", header="time (s),angle (deg)", comments="", fmt="%.6f")
    return folder, log


def ten_minutes() -> None:
    """Part (a)."""
    with tempfile.TemporaryDirectory() as name:
        estimated(*logged_folder(Path(name) / "first", 60.0))  # loads everything
        folder, log = logged_folder(Path(name) / "ten minutes", 600.0)
        (imported, estimate), found = estimated(folder, log)
        run = read_run(folder.run("response-001"))
        _, plain = timed(lambda: plain_script(run))
        print(f"(a) {len(run.angle.time)} frames, {len(found.response.frequency)} lines, 600 s at 1 kHz")
        print(f"    import {imported}, estimate {estimate}: {imported.processor + estimate.processor:.2f} s of "
              "computing")  # fmt: skip
        print(f"    plain script without its import {plain}: ratio of the estimates "
              f"{estimate.processor / plain.processor:.1f}")  # fmt: skip
        words = [sys.executable, "-c", "import sys; from freqid.cli import main; sys.exit(main())", "estimate"]
        _, whole = timed(lambda: subprocess.run([*words, str(folder.path)], check=True, capture_output=True))
        print(f"    freqid estimate as a whole process: {whole.wall:.2f} s", flush=True)


def estimated(folder: TestFolder, log: Path) -> tuple[tuple[Taken, Taken], Any]:
    """Times of import and estimate."""
    settings = ImportSettings(kind="response")
    _, imported = timed(lambda: import_logs(folder, TwoLogs(input="profile", angle=log), settings=settings))
    found, estimate = timed(lambda: estimate_folder(folder))
    return (imported, estimate), found


def sound_record(path: Path, seconds: float) -> Path:
    """Voltage and angle as a sound interface records them: a periodic multisine of 200 lines, white noise on both."""
    folder = create_folder(path)
    period = 33 * int(SOUND_RATE)
    harmonics = np.arange(11, 411, 2)
    lines = harmonics * SOUND_RATE / period
    amplitude = np.exp(1j * np.pi * np.arange(200) ** 2 / 200) * 2.0 / np.sqrt(200)

    def wave(line_amplitudes: np.ndarray) -> np.ndarray:
        spectrum = np.zeros(period // 2 + 1, dtype=complex)
        spectrum[harmonics] = line_amplitudes * period / 2
        return np.fft.irfft(spectrum, period).astype(np.float32)

    voltage, angle = wave(amplitude), wave(amplitude * VANE.response(lines))
    samples = int(seconds * SOUND_RATE)
    rng = np.random.default_rng(1)
    loud = np.float32(0.3 * np.sqrt(SOUND_RATE / 60))  # 0.3 deg in what a camera of 60 frames/s would see

    def blocks() -> Iterator[tuple[np.ndarray, np.ndarray]]:
        for begin in range(0, samples, 480_000):
            at = np.arange(begin, min(begin + 480_000, samples)) % period
            noise = rng.standard_normal((2, len(at)), dtype=np.float32)
            yield voltage[at] + np.float32(1e-3) * noise[0], angle[at] + loud * noise[1]

    facts = Run(
        name="response-001",
        kind="response",
        input=InputStream(
            time=np.empty(0), voltage=np.empty(0), hold="smooth", commanded=False,
            periodicity=Periodicity(
                period=period / SOUND_RATE, lines=lines, start=0.0, stop=samples // period * period / SOUND_RATE),
        ),
        angle=AngleStream(time=np.empty(0), angle=np.empty(0), angle_unit="deg", exposure=0.0, stamp="end"),
        common_clock=True,
        simulated=True,
    )  # fmt: skip
    return write_run_in_blocks(folder, facts, blocks(), rate=EvenRate(sample_rate=SOUND_RATE), samples=samples)


def one_hour_of_sound(seconds: float) -> None:
    """Part (b)."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name) / "sound"
        file = sound_record(folder, seconds)
        reading, estimating = [], []
        for _ in range(3):  # side by side, the best of each
            reading.append(numbers(READ_ONCE, file))
            estimating.append(numbers(ESTIMATE, folder))
        read, estimate = min(reading), min(estimating)
        print(f"(b) {seconds:.0f} s of two channels at 48 kHz, {file.stat().st_size / 1e6:.0f} MB")
        print(f"    read once with h5py {Taken(*read)}, whole estimate {Taken(*estimate[:2])}: "
              f"{estimate[0] / read[0]:.2f} times on the wall; at the peak {estimate[2]:.0f} MB")  # fmt: skip
        model = json.loads((folder / "results" / "model.json").read_text(encoding="utf-8"))
        for true, (key, q) in zip(VANE.vector, model["parameters"].items(), strict=True):
            deviation = q["standard_uncertainty"]
            print(f"    {key:18} {q['value']:.7g}, off by {(q['value'] - true) / deviation:+.2f} standard "
                  f"uncertainties of {deviation:.2g}", flush=True)  # fmt: skip


def numbers(script: str, argument: Path) -> list[float]:
    """The numbers that a script prints in a process of its own."""
    done = subprocess.run([sys.executable, "-c", script, str(argument)], check=True, capture_output=True, text=True)
    return [float(word) for word in done.stdout.split()]


def growth() -> None:
    """Part (c)."""
    profile = profile_of(300.0)
    first = None
    print("(c) frames, identification, over the first, frames over the first")
    for seconds in (600.0, 3600.0, 14_400.0):
        drive = prolonged(profile, seconds)
        run = SimulatedRig(model=VANE, sensor=SENSOR).run(
            drive, kind="response", name="long", rng=np.random.default_rng(1)
        )
        _, taken = timed(lambda run=run: identify(run))
        first = first or (taken.processor, len(run.angle.time))
        print(f"    {seconds:6.0f} s {len(run.angle.time):8d}  {taken}  {taken.processor / first[0]:6.1f} "
              f"{len(run.angle.time) / first[1]:6.1f}", flush=True)  # fmt: skip


def prolonged(profile: Profile, seconds: float) -> InputStream:
    """The profile with as many of its periods as fill the time."""
    begin, end, period = profile.steady_start, profile.steady_stop, profile.period_samples
    beside = len(profile.voltage) - (end - begin)
    periods = round((seconds * profile.sample_rate - beside) / period)
    one = profile.voltage[begin : begin + period]
    voltage = np.concatenate([profile.voltage[:begin], np.tile(one, periods), profile.voltage[end:]])
    return InputStream(
        time=np.arange(len(voltage)) / profile.sample_rate,
        voltage=voltage,
        hold=profile.hold,
        commanded=True,
        periodicity=Periodicity(
            period=period / profile.sample_rate,
            lines=np.asarray(profile.lines),
            start=begin / profile.sample_rate,
            stop=(begin + periods * period) / profile.sample_rate,
        ),
    )


def main() -> None:
    """Parse and run."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("parts", nargs="*", choices=["a", "b", "c", []], default=["a", "b", "c"])
    parser.add_argument("--seconds", type=float, default=3600.0, help="length of the record of part b")
    wanted = parser.parse_args()
    if "a" in wanted.parts:
        ten_minutes()
    if "b" in wanted.parts:
        one_hour_of_sound(wanted.seconds)
    if "c" in wanted.parts:
        growth()


if __name__ == "__main__":
    main()
