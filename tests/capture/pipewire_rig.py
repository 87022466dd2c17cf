"""How do the tests reach a rig through ALSA, as a sound card would be? A PipeWire of their own, without hardware.

Two null sinks stand for the output and the input of a sound interface; the vane of `plant_client` runs
between the monitor of the first and the second. ALSA's pulse plugin shows both as one device `vane`, two in, two out.
Everything lives in a private runtime directory, with its own bus (without one the session manager links nothing), and
in real time only. Loopback and angle come out of one stream, so the angle is later than the loopback by the delay of
the vane alone; the round trip is constant within a run and different in every run.

Nothing outlives the tests: every child gets SIGKILL when this process ends, however it ends.
"""

from __future__ import annotations

import contextlib
import os
import shutil
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, replace
from importlib.util import find_spec
from pathlib import Path

from jack_rig import child
from plant_client import PlantSettings

__all__ = ["PipeWireRig", "pipewire_rig", "what_pipewire_lacks"]

PATIENCE = 60.0  # s until a server must run
CLIENT = Path(__file__).with_name("plant_client.py")
PACKAGES = {
    "pipewire": "pipewire",
    "pipewire-pulse": "pipewire-pulse",
    "wireplumber": "wireplumber",
    "dbus-daemon": "dbus-daemon",
    "pactl": "pulseaudio-utils",
    "parec": "pulseaudio-utils",
    "pacat": "pulseaudio-utils",
    "setpriv": "util-linux",
}
PLUGINS = ("/usr/lib/*/alsa-lib/libasound_module_pcm_pulse.so", "libasound2-plugins")
ALSA = """
</usr/share/alsa/alsa.conf>
pcm.vane {
    type asym
    playback.pcm { type pulse device drive }
    capture.pcm { type pulse device angle.monitor }
    hint { show on description "vane" }
}
"""
CLOCK = "context.properties = {{ default.clock.rate = {rate} default.clock.quantum = 256 }}\n"


def what_pipewire_lacks() -> str | None:
    """Why there can be no PipeWire rig on this machine, with what to install, or None."""
    if not sys.platform.startswith("linux"):
        return f"the PipeWire rig needs Linux, this is {sys.platform}"
    lacking = {package for program, package in PACKAGES.items() if shutil.which(program) is None}
    if not any(Path("/").glob(PLUGINS[0].lstrip("/"))):
        lacking.add(PLUGINS[1])
    try:
        if find_spec("sounddevice") is not None:
            import sounddevice  # noqa: F401
    except OSError:
        lacking.add("libportaudio2")
    return f"the PipeWire rig needs the Debian packages {', '.join(sorted(lacking))}" if lacking else None


@dataclass(slots=True, kw_only=True)
class PipeWireRig:
    """Running servers with the vane between them."""

    plant: PlantSettings
    environment: dict[str, str]  # for a program that shall find them


@contextmanager
def pipewire_rig(plant: PlantSettings | None = None) -> Iterator[PipeWireRig]:
    """A rig that runs inside the `with` block and leaves nothing behind.

    Raises
    ------
    RuntimeError
        A server does not start; with what it printed.
    """
    plant = plant or PlantSettings()
    with ExitStack() as stack:
        folder = Path(stack.enter_context(tempfile.TemporaryDirectory(prefix="pw-")))  # short: socket names are
        environment = _environment(folder, plant)

        def start(name: str, *command: str) -> subprocess.Popen[bytes]:
            return stack.enter_context(child(command, environment, folder / f"{name}.log"))

        bus = folder / "bus"
        start("bus", "dbus-daemon", "--session", "--nofork", "--nopidfile", f"--address=unix:path={bus}")
        _wait(bus.exists, "bus", folder)
        start("pipewire", "pipewire")
        _wait((folder / "pipewire-0").exists, "pipewire", folder)
        start("wireplumber", "wireplumber")
        start("pulse", "pipewire-pulse")
        _wait(lambda: _pactl(environment, "info") == 0, "pulse", folder)
        for sink in ("drive", "angle"):
            module = ("module-null-sink", f"sink_name={sink}", f"rate={plant.sample_rate}", "channels=2")
            _wait(lambda module=module: _pactl(environment, "load-module", *module) == 0, "pulse", folder)  # type: ignore[misc]
        _wait(lambda: "angle" in _sinks(environment), "pulse", folder)
        plant = replace(plant, ready=str(folder / "vane.ready"))
        plant.write(folder / "vane.json")
        start("vane", sys.executable, str(CLIENT), "pulse", "--settings", str(folder / "vane.json"))
        _wait((folder / "vane.ready").exists, "vane", folder)
        yield PipeWireRig(plant=plant, environment=environment)


def _environment(folder: Path, plant: PlantSettings) -> dict[str, str]:
    (folder / "asound.conf").write_text(ALSA, encoding="ascii")
    (clock := folder / "pipewire" / "pipewire.conf.d").mkdir(parents=True)
    (clock / "clock.conf").write_text(CLOCK.format(rate=plant.sample_rate), encoding="ascii")
    return {
        **os.environ,
        "XDG_RUNTIME_DIR": str(folder),
        "HOME": str(folder),
        "XDG_CONFIG_HOME": str(folder),
        "XDG_STATE_HOME": str(folder),
        "DBUS_SESSION_BUS_ADDRESS": f"unix:path={folder / 'bus'}",
        "PULSE_SERVER": f"unix:{folder / 'pulse' / 'native'}",
        "PULSE_COOKIE": str(folder / "cookie"),
        "ALSA_CONFIG_PATH": str(folder / "asound.conf"),
        "JACK_NO_START_SERVER": "1",
        "JACK_DEFAULT_SERVER": "none",
        "OMP_NUM_THREADS": "1",
    }


def _run(environment: Mapping[str, str], *command: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(command, env=environment, capture_output=True, text=True, timeout=PATIENCE)


def _pactl(environment: Mapping[str, str], *command: str) -> int:
    return _run(environment, "pactl", *command).returncode


def _sinks(environment: Mapping[str, str]) -> str:
    return _run(environment, "pactl", "list", "short", "sinks").stdout


def _wait(ready: Callable[[], bool], name: str, folder: Path) -> None:
    end = time.monotonic() + PATIENCE
    while not ready():
        if time.monotonic() > end:
            said = (folder / f"{name}.log").read_text(encoding="utf-8", errors="replace").strip()
            raise RuntimeError(f"{name} does not run: {said}")
        with contextlib.suppress(InterruptedError):
            time.sleep(0.1)
