"""What can happen to a capture, and what is left of it? Each fault done to the real program on the JACK rig.

A fault is struck while the vane is driven. What the program does then is measured from outside: how long it takes to
end, what it says, what the newest run file holds against what the recorder heard until the fault, and how the drive
ended.
"""

from __future__ import annotations

import os
import re
import signal
import subprocess
import time
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import psutil
from jack_rig import JackRig
from sound_session import Capture, SoundSession, largest_step, onset

from excitation.profile_file import read_profile
from freqid.run_file import read_run

__all__ = ["FAULTS", "REFUSALS", "Fault", "Outcome", "Refusal", "refused", "struck"]

HANGS = 30.0  # s after which a program is said to hang
# Windows lacks these; there is no rig there either, but the file is read
KILL, STOP, HANG_UP = (getattr(signal, name, signal.SIGTERM) for name in ("SIGKILL", "SIGSTOP", "SIGHUP"))


@dataclass(frozen=True, slots=True, kw_only=True)
class Scene:
    """What a fault can get hold of."""

    capture: Capture
    rig: JackRig
    folder: Path


@dataclass(frozen=True, slots=True, kw_only=True)
class Fault:
    """Something that happens while the vane is driven.

    `ramped` where the program can still bring the drive to rest; `recovers` where the next command has to fold what
    was kept; `plant` changes the vane, `environment` the program.
    """

    name: str
    strike: Callable[[Scene], None]
    says: str  # regular expression, in the last line of the program, or of the next command where it recovers
    ramped: bool = True
    recovers: bool = False
    played_out: bool = False  # the program may go on to the end of the profile
    plant: dict[str, float] = field(default_factory=dict)
    environment: dict[str, str] = field(default_factory=dict)

    @property
    def built_in(self) -> bool:
        """Whether it happens by itself, so that nobody outside knows when."""
        return self.strike is _nothing


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What was left. Times in s, voltages in V."""

    name: str
    ended_after: float | None  # None where nobody knows when the fault happened
    status: int | None  # None: hangs
    message: str
    kept: float  # of the profile
    lost: float  # sent before the fault, not in the file
    readable: bool
    complete: bool
    largest_step: float
    profile_step: float
    highest_voltage: float

    @property
    def gentle(self) -> bool:
        """No step beyond those of the profile; samples travel as float32, so a step is known to one digit of it."""
        return self.largest_step <= self.profile_step + 2 * 2.0**-24 * self.highest_voltage


def _signal_program(number: signal.Signals) -> Callable[[Scene], None]:
    return lambda scene: scene.capture.process.send_signal(number)


def _signal_child(number: signal.Signals) -> Callable[[Scene], None]:
    return lambda scene: scene.capture.stream_process().send_signal(number)


def _signal_server(number: signal.Signals) -> Callable[[Scene], None]:
    return lambda scene: scene.rig.signal_server(number)


def _interrupt_twice(scene: Scene) -> None:
    scene.capture.process.send_signal(signal.SIGINT)
    time.sleep(0.02)  # in the middle of the ramp
    scene.capture.process.send_signal(signal.SIGINT)


def _pause_child(scene: Scene) -> None:
    child = scene.capture.stream_process()
    child.suspend()
    time.sleep(0.3)
    child.resume()


def _fill_disk(scene: Scene) -> None:
    with suppress(OSError), open(scene.folder / "filler", "wb", buffering=0) as filler:
        while True:
            filler.write(bytes(4096))


def _nothing(scene: Scene) -> None:
    """The vane or the program has the fault built in."""


STOPPED = "stopped delivering data"
FAULTS = (
    Fault(name="server killed", strike=_signal_server(KILL), says=STOPPED, ramped=False),
    Fault(name="server stopped", strike=_signal_server(STOP), says=STOPPED, ramped=False),
    Fault(name="child killed", strike=_signal_child(KILL), says="ended by itself", ramped=False),
    Fault(name="child stopped", strike=_signal_child(STOP), says="no sign of life", ramped=False),
    Fault(name="parent killed", strike=_signal_program(KILL), says="incomplete", recovers=True),
    Fault(name="Ctrl-C", strike=_signal_program(signal.SIGINT), says=r"interrupted \(SIGINT\)"),
    Fault(name="Ctrl-C twice", strike=_interrupt_twice, says=r"interrupted \(SIGINT\)"),
    Fault(name="SIGTERM", strike=_signal_program(signal.SIGTERM), says=r"interrupted \(SIGTERM\)"),
    Fault(name="terminal closed", strike=_signal_program(HANG_UP), says=r"interrupted \(SIGHUP\)"),
    Fault(name="angle near stops", strike=_nothing, says="guard: angle", plant={"gain": 24.0}),
    Fault(name="loopback dies", strike=_nothing, says="guard: loopback", plant={"loopback_ends": 2.0}),
    Fault(name="disk full", strike=_fill_disk, says="No space left"),
    Fault(name="child paused 0.3 s", strike=_pause_child, says="not verified", ramped=False, played_out=True),
    Fault(
        name="callback late",
        strike=_nothing,
        says="not verified",
        ramped=False,
        played_out=True,
        environment={"FREQID_PLANT_FAULT": "stall@2.0"},
    ),
    Fault(
        name="callback exception",
        strike=_nothing,
        says="fault in the stream",
        environment={"FREQID_PLANT_FAULT": "callback-exception@2.0"},
    ),
)


def struck(fault: Fault, session: SoundSession, rig: JackRig, *, after: float) -> Outcome:
    """Capture in the folder of `session`, let `fault` happen `after` s of drive, measure what is left."""
    since = rig.frames_sent()
    capture = session.start("--device", "vane", "--armed", **fault.environment)
    try:
        capture.wait_until_driven(rig, since, 0.1 if fault.built_in else after)
        scene = Scene(capture=capture, rig=rig, folder=session.folder)
        family = psutil.Process(capture.process.pid).children(recursive=True)
        fault.strike(scene)
        at, frame = time.monotonic(), rig.frames_sent()
        status, ended_after = _ended(capture, family, at)
    finally:
        capture.kill_all()
    message = _next_command(session) if fault.recovers else capture.last_line()
    ended = None if fault.built_in else ended_after
    return _measured(fault.name, session, rig, since, frame, (ended, status, message), fault)


def _ended(capture: Capture, family: list[psutil.Process], at: float) -> tuple[int | None, float | None]:
    """Exit status of the program, and s until it and all its children were gone."""
    try:
        status = capture.process.wait(HANGS)
    except subprocess.TimeoutExpired:
        return None, None
    _, alive = psutil.wait_procs(family, timeout=HANGS)
    for child in alive:
        child.kill()
    return status, None if alive else time.monotonic() - at


def _next_command(session: SoundSession) -> str:
    done = subprocess.run(
        session.command("estimate"), env=session.surroundings(), capture_output=True, text=True, timeout=120.0
    )
    return next((line for line in done.stderr.splitlines() if "recovered" in line), done.stderr)


def _measured(
    name: str, session: SoundSession, rig: JackRig, since: int, frame: int,
    ending: tuple[float | None, int | None, str], fault: Fault,
) -> Outcome:  # fmt: skip
    profile = read_profile(session.folder / "profile.h5").voltage
    sent = rig.sent()[since:] * rig.plant.voltage_full_scale
    first = onset(sent)
    begun = 0 if first is None else first - int(np.flatnonzero(profile)[0])
    driven = (frame - since - begun) / rig.plant.sample_rate
    seconds, complete = _last_run(session)
    return Outcome(
        name=name,
        ended_after=ending[0],
        status=ending[1],
        message=re.sub(r"\s+", " ", ending[2]),
        kept=seconds or 0.0,
        lost=0.0 if fault.built_in else max(driven - (seconds or 0.0), 0.0),
        readable=seconds is not None,
        complete=complete,
        largest_step=largest_step(sent),
        profile_step=largest_step(profile),
        highest_voltage=float(np.abs(sent).max()),
    )


def _last_run(session: SoundSession) -> tuple[float | None, bool]:
    """Last instant in the newest run file, s after the profile began, and whether it calls itself complete."""
    files = session.runs()
    if not files:
        return None, False
    run = read_run(files[-1])
    return float(run.input.time[-1]), run.complete


@dataclass(frozen=True, slots=True, kw_only=True)
class Refusal:
    """Something that must be noticed before anything sounds."""

    name: str
    says: str
    options: tuple[str, ...] = ("--device", "vane", "--armed")
    sheet: tuple[str, str] | None = None  # replaced in rig.toml
    environment: dict[str, str] = field(default_factory=dict)
    server_rate: float = 1.0  # of the server, over the rate of the profile
    hides_portaudio: bool = False


REFUSALS = (
    Refusal(name="not armed", says="not armed", options=("--device", "vane")),
    Refusal(name="unknown device", says="unknown.*nobody", options=("--device", "nobody", "--armed")),
    Refusal(name="too many channels", says="channel", options=("--device", "vane", "--armed", "--angle-channel", "5")),
    Refusal(name="rate of the server", says="refuses.*Hz.*prefers", server_rate=0.5),
    Refusal(name="rate of the profile", says="designed for", sheet=("sample_rate = {rate}.0", "sample_rate = 441.0")),
    Refusal(name="above the limit", says="limit", sheet=("voltage = 5.0", "voltage = 0.5")),
    Refusal(name="no server", says="unknown|no sound interface", environment={"JACK_DEFAULT_SERVER": "nobody"}),
    Refusal(name="no PortAudio", says="PortAudio", hides_portaudio=True),
)

_HIDDEN = """
import ctypes.util
find = ctypes.util.find_library
ctypes.util.find_library = lambda name: None if name == "portaudio" else find(name)
"""


def refused(refusal: Refusal, session: SoundSession, rig: JackRig) -> Outcome:
    """Ask for a capture that must be refused; what sounded is in the outcome."""
    since = rig.frames_sent()
    sheet = session.folder / "rig.toml"
    as_it_was = sheet.read_text(encoding="utf-8")
    if refusal.sheet is not None:
        old, new = (text.format(rate=rig.plant.sample_rate) for text in refusal.sheet)
        assert old in as_it_was
        sheet.write_text(as_it_was.replace(old, new), encoding="utf-8")
    environment = dict(refusal.environment)
    if refusal.hides_portaudio:
        (hiding := session.folder.parent / "hidden").mkdir(exist_ok=True)
        (hiding / "sitecustomize.py").write_text(_HIDDEN, encoding="utf-8")
        environment["PYTHONPATH"] = os.pathsep.join((str(hiding), session.surroundings()["PYTHONPATH"]))
    begun = time.monotonic()
    capture = session.start(*refusal.options, **environment)
    try:
        status, ended_after = _ended(capture, [], begun)
    finally:
        capture.kill_all()
        sheet.write_text(as_it_was, encoding="utf-8")
    ending = (ended_after, status, capture.last_line())
    return _measured(refusal.name, session, rig, since, since, ending, Fault(name="", strike=_nothing, says=""))

