"""How do the tests get a sound interface with a rig behind it, without sound hardware? A JACK server of their own.

The server is the dummy one, a child process; the vane of `plant_client` runs between its ports and appears to
PortAudio as the two-in, two-out device `vane`. A recorder beside it keeps every sample that reached the vane. PortAudio
sends period n and hears its echo in period n + 1: the round trip is exactly one period.

A name of a killed server stays taken in one of eight places of a table shared by all servers of a user, so names come
from a pool of two, each held under a file lock. Nothing outlives the tests: every child gets SIGKILL when this process
ends, however it ends.

    python tests/capture/jack_rig.py [--gain 12 --delay-frames 960 ...]   holds a rig open until Ctrl-C
"""

from __future__ import annotations

import argparse
import contextlib
import os
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from importlib.util import find_spec
from pathlib import Path
from typing import IO

import numpy as np
from numpy.typing import NDArray
from plant_client import PlantSettings, read_record

__all__ = ["JackRig", "child", "jack_rig", "server_environment", "what_is_missing"]

PATIENCE = 60.0  # s until a server or client must run; they take one, or ten on a crowded machine
PROGRAMS = {"jackd": "jackd2", "setpriv": "util-linux"}
SERVER_NAMES = tuple(f"{os.environ.get('FREQID_TEST_JACK_SERVER', 'freqid-test')}-{number}" for number in range(2))
CLIENT = Path(__file__).with_name("plant_client.py")


def what_is_missing() -> str | None:
    """Why there can be no JACK rig on this machine, with what to install, or None."""
    if not sys.platform.startswith("linux"):
        return f"the JACK rig needs Linux, this is {sys.platform}"
    lacking = sorted({package for program, package in PROGRAMS.items() if shutil.which(program) is None})
    if lacking:
        return f"the JACK rig needs the Debian packages {', '.join(lacking)}"
    if find_spec("jack") is None:
        return "the JACK rig needs the Python package JACK-Client (`pip install -e '.[test]'`)"
    try:
        import sounddevice  # noqa: F401
    except OSError:
        return "the JACK rig needs the Debian package libportaudio2"
    return None


@dataclass(slots=True, kw_only=True)
class JackRig:
    """A running server with the vane and the recorder on it."""

    name: str
    period: int  # frames
    plant: PlantSettings
    folder: Path
    server: subprocess.Popen[bytes]
    clients: tuple[subprocess.Popen[bytes], ...]

    @property
    def environment(self) -> dict[str, str]:
        """For a program that shall find this server."""
        return {**os.environ, **server_environment(self.name)}

    @property
    def round_trip(self) -> float:
        """s from a sample sent to its echo at the input."""
        return self.period / self.plant.sample_rate

    @property
    def record_file(self) -> Path:
        """Where the recorder writes."""
        return Path(self.plant.record)

    def frames_sent(self) -> int:
        """Samples that have reached the vane so far."""
        return self.record_file.stat().st_size // (4 * (self.period + 1)) * self.period

    def sent(self) -> NDArray[np.float64]:
        """Every sample that reached the vane, in digits; a gap in the record is an error of the rig."""
        frames, samples = read_record(self.record_file, period=self.period)
        steps = np.diff(frames)  # modulo 2^32
        if not np.all(steps == self.period):
            raise RuntimeError(f"the recorder missed {np.count_nonzero(steps != self.period)} periods")
        return samples.ravel().astype(np.float64)

    def freewheel(self, on: bool) -> None:
        """Let the server run as fast as its clients can, or in real time again."""
        program = [sys.executable, "-c", _FREEWHEEL.format(name=self.name, on=on)]
        subprocess.run(program, env=self.environment, check=True, capture_output=True, timeout=PATIENCE)

    def signal_server(self, number: signal.Signals) -> None:
        """Kill, stop or continue the server."""
        os.kill(self.server.pid, number)


_FREEWHEEL = "import jack; c = jack.Client('wheel', servername='{name}', no_start_server=True); c.set_freewheel({on})"


def server_environment(name: str) -> dict[str, str]:
    """The variables by which JACK's clients find the server `name` and start none."""
    return {"JACK_DEFAULT_SERVER": name, "JACK_NO_START_SERVER": "1"}


@contextmanager
def jack_rig(plant: PlantSettings | None = None, *, period: int = 1024, recorder: bool = True) -> Iterator[JackRig]:
    """A rig that runs inside the `with` block and leaves nothing behind.

    Raises
    ------
    RuntimeError
        A server or client does not start; with what it printed.
    """
    plant = plant or PlantSettings()
    with contextlib.ExitStack() as stack:
        name = stack.enter_context(_server_name())
        environment = {**os.environ, **server_environment(name), "OMP_NUM_THREADS": "1"}
        folder = Path(stack.enter_context(tempfile.TemporaryDirectory(prefix="jack-rig-")))
        command = _server_command(name, plant.sample_rate, period)
        server = stack.enter_context(child(command, environment, folder / "server"))
        clients = []
        for role in ("vane", "recorder") if recorder else ("vane",):
            settings = replace(
                plant, server=name, record=str(folder / "record.f32"), ready=str(folder / f"{role}.ready")
            )
            settings.write(folder / f"{role}.json")
            command = [sys.executable, str(CLIENT), role, "--settings", str(folder / f"{role}.json")]
            clients.append(stack.enter_context(child(command, environment, folder / role)))
        for role, client in zip(("vane", "recorder"), clients, strict=False):
            _wait((folder / f"{role}.ready").exists, client, folder / role)
        if server.poll() is not None:
            raise RuntimeError(f"a JACK server {name!r} that is not ours answers; end it first")
        yield JackRig(
            name=name, period=period, plant=settings, folder=folder, server=server, clients=tuple(clients)
        )


@contextmanager
def _server_name() -> Iterator[str]:
    """A name of the pool, for this process alone."""
    import fcntl  # there is none on Windows, where this file must only be read

    end = time.monotonic() + 600.0
    while True:
        for name in SERVER_NAMES:
            with open(Path(tempfile.gettempdir()) / f"{name}.{os.getuid()}.lock", "w", encoding="ascii") as lock:
                try:
                    fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
                except BlockingIOError:
                    continue
                yield name
                return
        if time.monotonic() > end:
            raise RuntimeError(f"other processes hold the JACK servers {' and '.join(SERVER_NAMES)} for ten minutes")
        time.sleep(0.1)


def _server_command(name: str, sample_rate: int, period: int) -> list[str]:
    return [
        *("jackd", "-n", name, "--no-realtime", "--no-mlock", "-p", "64", "-S"),
        *("-d", "dummy", "-r", str(sample_rate), "-p", str(period), "-C", "2", "-P", "2"),
    ]


@contextmanager
def child(command: Sequence[str], environment: Mapping[str, str], log: Path) -> Iterator[subprocess.Popen[bytes]]:
    """A process in its own group, killed with this one or at the end of the block; what it prints goes to `log`."""
    with open(log, "wb") as output:
        process = subprocess.Popen(
            ["setpriv", "--pdeathsig", "KILL", "--", *command],
            env=environment,
            stdin=subprocess.DEVNULL,
            stdout=output,
            stderr=subprocess.STDOUT,
            start_new_session=True,
        )
    try:
        yield process
    finally:
        _end(process)


def _end(process: subprocess.Popen[bytes]) -> None:
    """Ask, then kill; a stopped process is woken first so that it can obey."""
    for number, patience in ((signal.SIGTERM, 2.0), (signal.SIGKILL, PATIENCE)):
        with contextlib.suppress(ProcessLookupError):
            os.killpg(process.pid, number)
            os.killpg(process.pid, signal.SIGCONT)
        with contextlib.suppress(subprocess.TimeoutExpired):
            process.wait(patience)
            return


def _wait(ready: Callable[[], bool], process: subprocess.Popen[bytes], log: Path) -> None:
    end = time.monotonic() + PATIENCE
    while not ready():
        if process.poll() is not None or time.monotonic() > end:
            said = log.read_text(encoding="utf-8", errors="replace").strip()
            raise RuntimeError(f"{log.name} does not run: {said}")
        time.sleep(0.05)


def _main(output: IO[str]) -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    for name, default in (
        ("gain", 12.0),
        ("natural-frequency", 3.0),
        ("damping-ratio", 0.12),
        ("noise", 0.0),
        ("delay-frames", 960),
        ("sample-rate", 48000),
    ):
        parser.add_argument(f"--{name}", type=type(default), default=default)
    parser.add_argument("--period", type=int, default=1024)
    told = vars(parser.parse_args())
    period = told.pop("period")
    if (missing := what_is_missing()) is not None:
        parser.error(missing)
    with jack_rig(PlantSettings(**told), period=period) as rig, contextlib.suppress(KeyboardInterrupt):
        for name, value in server_environment(rig.name).items():
            print(f"export {name}={value}", file=output, flush=True)
        while rig.server.poll() is None:
            time.sleep(0.2)


if __name__ == "__main__":
    _main(sys.stdout)
