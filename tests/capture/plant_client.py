"""What stands behind the sound interface in these tests? A spring-centred vane in software, and a recorder beside it.

    python plant_client.py vane --settings FILE       JACK client `vane`: ports drive, spare -> loopback, angle
                                                      (and echo, for the recorder, where the loopback is no echo)
    python plant_client.py recorder --settings FILE   JACK client `recorder`: keeps every sample that reached the vane
    python plant_client.py pulse --settings FILE      the vane from the monitor of the sink `drive` to the sink `angle`

The vane obeys theta'' + 2 zeta wn theta' + wn^2 theta = K wn^2 u, solved exactly for straight lines between the
samples (first-order hold). So its response at frequency f is that of the continuous model times sinc^2(f / rate),
which differs from one by (pi f / rate)^2 / 3: 4e-6 at 8 Hz and 8 kHz. Delays are whole frames.

The record is a file of blocks, each the frame time of the server and the samples of one period, written without
buffering before the period ends: whoever is killed, what was sent is in it.
"""

from __future__ import annotations

import argparse
import json
import os
import signal
import subprocess
import threading
import time
from collections.abc import Callable
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["PlantSettings", "Vane", "read_record"]

Floats = NDArray[np.float64]
PATIENCE = 60.0  # s until the server must answer


@dataclass(frozen=True, slots=True, kw_only=True)
class PlantSettings:
    """The vane, the scales of its converters and where the client finds its server and files."""

    sample_rate: int = 48000  # Hz
    gain: float = 12.0  # deg/V
    natural_frequency: float = 3.0  # Hz
    damping_ratio: float = 0.12
    delay_frames: int = 960
    noise: float = 0.0  # deg rms, white; drawn anew, and the same every time, at each onset of the drive
    seed: int = 1
    voltage_full_scale: float = 10.0  # V per digit
    angle_full_scale: float = 45.0  # deg per digit
    loopback_gain: float = 1.0
    loopback_ends: float | None = None  # s of non-zero drive after which the loopback is dead
    server: str = ""
    record: str = ""  # file of the recorder
    ready: str = ""  # file that appears when the client runs

    @property
    def delay(self) -> float:
        """s."""
        return self.delay_frames / self.sample_rate

    def write(self, path: Path) -> None:
        """As JSON, for the client process."""
        path.write_text(json.dumps(asdict(self)), encoding="utf-8")

    @property
    def faithful(self) -> bool:
        """Whether the loopback is the drive, sample for sample."""
        return self.loopback_gain == 1.0 and self.loopback_ends is None

    @classmethod
    def read(cls, path: Path) -> PlantSettings:
        """What `write` wrote."""
        return cls(**json.loads(path.read_text(encoding="utf-8")))


class Vane:
    """Drive in digits to loopback and angle in digits, block after block of any length."""

    def __init__(self, settings: PlantSettings) -> None:
        from scipy.signal import cont2discrete, lfilter  # the recorder starts without it

        wn = 2 * np.pi * settings.natural_frequency
        gain = settings.gain * settings.voltage_full_scale / settings.angle_full_scale
        numerator, denominator, _ = cont2discrete(
            ([gain * wn**2], [1.0, 2 * settings.damping_ratio * wn, wn**2]), 1 / settings.sample_rate, method="foh"
        )
        self._numerator, self._denominator = numerator[0], denominator
        self._state = np.zeros(2)
        self._filter = lfilter
        self._late = np.zeros(settings.delay_frames)
        self._noise = settings.noise / settings.angle_full_scale
        self._onsets, self._silent = 0, 0
        self._rng = np.random.default_rng((settings.seed, 0))
        self._driven = 0
        self._settings = settings

    def process(self, drive: Floats) -> tuple[Floats, Floats]:
        """Loopback and angle (n,) for the drive (n,) of one block."""
        waiting = np.concatenate((self._late, drive))
        self._late = waiting[len(drive) :]
        angle, self._state = self._filter(
            self._numerator, self._denominator, waiting[: len(drive)], zi=self._state
        )
        return self._loopback(drive), angle + self._noise_of(drive) if self._noise else angle

    def _noise_of(self, drive: Floats) -> Floats:
        """White noise (n,) that begins its sequence anew with the first drive after half a second of silence."""
        driven = np.flatnonzero(drive)
        before = int(driven[0]) if len(driven) else len(drive)
        noise = self._noise * self._rng.standard_normal(before)
        if len(driven) and self._silent + before > 0.5 * self._settings.sample_rate:
            self._onsets += 1
            self._rng = np.random.default_rng((self._settings.seed, self._onsets))
        self._silent = len(drive) - 1 - int(driven[-1]) if len(driven) else self._silent + len(drive)
        return np.concatenate((noise, self._noise * self._rng.standard_normal(len(drive) - before)))

    def _loopback(self, drive: Floats) -> Floats:
        self._driven += int(np.count_nonzero(drive))
        ends = self._settings.loopback_ends
        dead = ends is not None and self._driven > ends * self._settings.sample_rate
        return np.zeros_like(drive) if dead else self._settings.loopback_gain * drive


def read_record(path: Path, *, period: int) -> tuple[NDArray[np.uint32], NDArray[np.float32]]:
    """Frame times (n,) of the blocks and their samples (n, period); a block cut short at the end is left out."""
    block = np.dtype([("frame", "<u4"), ("samples", "<f4", (period,))])
    raw = path.read_bytes()
    blocks = np.frombuffer(raw[: len(raw) // block.itemsize * block.itemsize], dtype=block)
    return blocks["frame"], blocks["samples"]


def _run_vane(settings: PlantSettings) -> None:
    vane = Vane(settings)
    client = _client("vane", settings)
    drive = client.inports.register("drive")
    client.inports.register("spare")
    loopback = client.outports.register("loopback")
    angle = client.outports.register("angle")
    echo = None if settings.faithful else client.outports.register("echo")

    def process(frames: int) -> None:
        sent_back, turned = vane.process(drive.get_array().astype(np.float64))
        loopback.get_array()[:] = sent_back
        angle.get_array()[:] = turned
        if echo is not None:
            echo.get_array()[:] = drive.get_array()

    client.set_process_callback(process)
    _serve(client, settings, lambda: None)


def _run_recorder(settings: PlantSettings) -> None:
    client = _client("recorder", settings)
    heard = client.inports.register("heard")
    record = os.open(settings.record, os.O_WRONLY | os.O_CREAT | os.O_TRUNC, 0o600)

    def process(frames: int) -> None:
        frame = np.array([client.last_frame_time], dtype="<u4").tobytes()
        os.write(record, frame + bytes(heard.get_buffer()))

    client.set_process_callback(process)
    echo = "vane:loopback" if settings.faithful else "vane:echo"
    _serve(client, settings, lambda: _patiently(lambda: client.connect(echo, heard)))


def _client(name: str, settings: PlantSettings) -> Any:
    """A client of the server, as soon as there is one."""
    import jack

    return _patiently(lambda: jack.Client(name, use_exact_name=True, servername=settings.server, no_start_server=True))


def _patiently(act: Callable[[], Any]) -> Any:
    """What `act` returns once it succeeds."""
    import jack

    end = time.monotonic() + PATIENCE
    while True:
        try:
            return act()
        except jack.JackError:
            if time.monotonic() > end:
                raise
            time.sleep(0.05)


def _serve(client: Any, settings: PlantSettings, begin: Callable[[], None]) -> None:
    """Run until the server goes away or the process is told to end."""
    over = threading.Event()
    client.set_shutdown_callback(lambda status, reason: os._exit(0))  # closing a client of a dead server can hang
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, lambda *_: over.set())
    client.activate()
    begin()
    Path(settings.ready).touch()
    over.wait()
    client.close()


def _run_pulse(settings: PlantSettings) -> None:
    form = ["--raw", "--format=float32le", "--channels=2", f"--rate={settings.sample_rate}", "--latency-msec=100"]
    vane, frame = Vane(settings), 2 * np.dtype("<f4").itemsize
    vane.process(np.zeros(256))  # everything is loaded before sound flows: what waits in pipes is delay for good
    say = subprocess.Popen(["pacat", *form, "-d", "angle"], stdin=subprocess.PIPE)
    hear = subprocess.Popen(["parec", *form, "-d", "drive.monitor"], stdout=subprocess.PIPE)
    assert hear.stdout is not None
    assert say.stdin is not None
    while block := hear.stdout.read(256 * frame):
        drive = np.frombuffer(block[: len(block) // frame * frame], dtype="<f4").reshape(-1, 2)[:, 0]
        pair = np.stack(vane.process(drive.astype(np.float64)), axis=1).astype("<f4")
        say.stdin.write(pair.tobytes())
        say.stdin.flush()
        Path(settings.ready).touch()


def _main() -> None:
    roles = {"vane": _run_vane, "recorder": _run_recorder, "pulse": _run_pulse}
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("role", choices=roles)
    parser.add_argument("--settings", type=Path, required=True)
    arguments = parser.parse_args()
    roles[arguments.role](PlantSettings.read(arguments.settings))


if __name__ == "__main__":
    _main()
