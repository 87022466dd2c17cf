"""The recording process's end: start the stream's process, order, follow, and end it whatever state it is in.

A heartbeat ten times a second, or any other message, shows that the process lives. Waiting time is counted only while
waiting, so a recording process that was itself held up does not blame the stream.
"""

from __future__ import annotations

import contextlib
import json
import os
import queue
import subprocess
import sys
import threading
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import freqid
from freqid.capture.sound.interface import SoundDevice
from freqid.capture.sound.messages import BLOCK, read_message
from freqid.errors import CaptureError

__all__ = ["Follower", "Outcome", "StreamLink", "list_devices"]

ANSWER = 10.0  # s that asking and opening devices may take
SILENCE = 2.0  # s without a sign of life
RAMP_DOWN = 4.0  # s from a request to stop until the stream must have ended
LOOK_EVERY = 0.1  # s
WAITING_MESSAGES = 256


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """How the stream ended. `reason` is None where all was sent."""

    reason: str | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Follower:
    """What is called for every block of bytes and every heartbeat; `wants_stop` gives the reason to stop, or None."""

    block: Callable[[bytes], None]
    beat: Callable[[dict[str, Any]], None]
    wants_stop: Callable[[], str | None]


class StreamLink:
    """A process for one order; used with `with`, so that it never outlives the block."""

    def __init__(self, order: Mapping[str, Any]) -> None:
        self._process = subprocess.Popen(
            [sys.executable, "-P", "-m", "freqid.capture.sound.stream_process"],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=None if os.environ.get("FREQID_DEBUG") == "1" else subprocess.DEVNULL,
            env=_environment(),
            **_apart(),
        )
        self._messages: queue.Queue[tuple[bytes, bytes] | None] = queue.Queue(WAITING_MESSAGES)
        self._reading = threading.Thread(target=self._read, daemon=True)
        self._reading.start()
        self._tell(order)

    @property
    def pid(self) -> int:
        """Number of the process."""
        return self._process.pid

    def __enter__(self) -> StreamLink:
        return self

    def __exit__(self, *_: object) -> None:
        with contextlib.suppress(OSError, AttributeError):
            self._process.stdin.close()  # type: ignore[union-attr] # the process takes it as a request to stop
        try:
            self._process.wait(SILENCE)
        except subprocess.TimeoutExpired:
            self._process.kill()
            with contextlib.suppress(subprocess.TimeoutExpired):
                self._process.wait(SILENCE)
        self._reading.join(SILENCE)
        if not self._reading.is_alive():
            self._process.stdout.close()  # type: ignore[union-attr]

    def answer(self) -> dict[str, Any]:
        """The answer to the order.

        Raises
        ------
        CaptureError
            The order was refused, or the sound system does not answer.
        """
        try:
            message = self._messages.get(timeout=ANSWER)
        except queue.Empty:
            self._process.kill()
            raise CaptureError(
                f"no answer from the sound system within {ANSWER:g} s; restart the sound server, or unplug and plug the"
                " interface"
            ) from None
        if message is None:
            raise CaptureError(f"{self._ended_by_itself()} before anything was sent; try again")
        answer: dict[str, Any] = json.loads(message[1])
        if "fault" in answer:
            raise CaptureError(str(answer["fault"]))
        return answer

    def play(self, plan: Mapping[str, Any]) -> None:
        """Give the word to go."""
        self._tell({"play": plan})

    def follow(self, follower: Follower) -> Outcome:
        """Hand everything to the follower until the stream has ended, one way or the other."""
        patience, waited, stopping = ANSWER, 0.0, None
        while True:
            if stopping is None and (stopping := follower.wants_stop()) is not None:
                self._tell({"stop": True})
                waited_since_stop = 0.0
            try:
                message = self._messages.get(timeout=LOOK_EVERY)
            except queue.Empty:
                waited += LOOK_EVERY
                if waited >= patience:
                    self._process.kill()
                    return Outcome(reason=f"{self._silence(waited)}{_after(stopping)}")
                continue
            waited = 0.0
            patience = SILENCE
            if message is None:
                return Outcome(reason=f"{self._ended_by_itself()}{_after(stopping)}")
            kind, content = message
            if kind == BLOCK:
                follower.block(content)
                continue
            text: dict[str, Any] = json.loads(content)
            if "fault" in text:
                return Outcome(reason=str(text["fault"]))
            if "end" in text:
                return Outcome(reason=_reason(text, stopping))
            follower.beat(text)
            if stopping is not None:
                waited_since_stop += LOOK_EVERY  # one beat
                if waited_since_stop > RAMP_DOWN:
                    self._process.kill()
                    return Outcome(reason=f"{stopping}, but the stream did not end within {RAMP_DOWN:g} s")

    def _silence(self, waited: float) -> str:
        return f"the stream process gave no sign of life for {waited:.0f} s and was ended"

    def _ended_by_itself(self) -> str:
        with contextlib.suppress(subprocess.TimeoutExpired):
            self._process.wait(SILENCE)
        status = self._process.returncode
        how = f"signal {-status}" if status is not None and status < 0 else f"status {status}"
        return f"the stream process ended by itself ({how})"

    def _tell(self, words: Mapping[str, Any]) -> None:
        line = json.dumps(words, ensure_ascii=True) + "\n"
        with contextlib.suppress(OSError):  # a process that is gone is noticed by what it does not say
            self._process.stdin.write(line.encode())  # type: ignore[union-attr]
            self._process.stdin.flush()  # type: ignore[union-attr]

    def _read(self) -> None:
        pipe: Any = self._process.stdout
        message: tuple[bytes, bytes] | None = (b"", b"")
        while message is not None:
            try:
                message = read_message(pipe)
            except (OSError, ValueError):
                message = None
            try:
                self._messages.put(message, timeout=ANSWER)
            except queue.Full:
                return  # nobody follows any more


def list_devices() -> tuple[SoundDevice, ...]:
    """All sound devices of this computer, asked for in a process that can be ended.

    Raises
    ------
    CaptureError
        PortAudio is missing, refuses, or does not answer.
    """
    with StreamLink({"what": "ask"}) as link:
        return tuple(SoundDevice.from_json(device) for device in link.answer()["devices"])


def _reason(end: Mapping[str, Any], stopping: str | None) -> str | None:
    told = end["end"]
    if stopping is None:
        return None if told is None else str(told)
    return stopping if not end["failed"] else f"{stopping}, {str(told).rpartition(', ')[2]}"


def _after(stopping: str | None) -> str:
    return "" if stopping is None else f" after it was told to stop: {stopping}"


def _environment() -> dict[str, str]:
    """Ours, with this program's place on the path."""
    here = str(Path(freqid.__file__).resolve().parent.parent)
    before = os.environ.get("PYTHONPATH")
    path = here if not before else os.pathsep.join([before, here])
    return {**os.environ, "PYTHONPATH": path, "PYTHONIOENCODING": "utf-8"}


def _apart() -> dict[str, Any]:
    """A session of its own: Ctrl-C and a closed terminal reach the recording process alone."""
    if sys.platform == "win32":
        return {"creationflags": subprocess.CREATE_NEW_PROCESS_GROUP | subprocess.ABOVE_NORMAL_PRIORITY_CLASS}
    return {"start_new_session": True}
