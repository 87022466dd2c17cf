"""What happens with every block of a running stream? The next samples go out, what came in is kept, the angle watched.

`Transfer` is called by the sound interface's own thread and must never wait or raise: whatever fails in it turns into
a ramp to the bias. Blocks wait in a queue for the process's main thread to hand them on.
"""

from __future__ import annotations

import os
import time
from collections import deque
from dataclasses import dataclass

import numpy as np

from freqid.capture.sound.guard import AngleGuard
from freqid.capture.sound.interface import Float32s
from freqid.capture.sound.messages import COLUMNS, Block
from freqid.capture.sound.playback import Playback

__all__ = ["PlantedFault", "Transfer", "planted_fault"]

NOT_TAKEN = 2.0  # s without room in the pipe after which the stream ends
MOST_WAITING = 64 << 20  # bytes of blocks; beside a stream faster than real time it waits at the half


@dataclass(frozen=True, slots=True, kw_only=True)
class PlantedFault:
    """A fault planted for a test of the machinery: "callback-exception" or "stall", at a time of the profile in s."""

    kind: str
    at: float


def planted_fault() -> PlantedFault | None:
    """The fault that FREQID_PLANT_FAULT=KIND@SECONDS plants; None where there is none."""
    kind, _, at = os.environ.get("FREQID_PLANT_FAULT", "").partition("@")
    return PlantedFault(kind=kind, at=float(at)) if kind and at else None


class Transfer:
    """The exchange between playback, both input channels and the queue. `reason` says why it is ending early."""

    def __init__(
        self,
        playback: Playback,
        guard: AngleGuard,
        *,
        drive: int,
        inputs: tuple[int | None, int],
        fault_frame: int = -1,
    ) -> None:
        """`drive` and `inputs` (loopback or None, angle) are channels counted from 0."""
        self._playback, self.angle_guard = playback, guard
        self._drive, (self._loopback, self._angle) = drive, inputs
        self._fault_frame, self._fault = fault_frame, planted_fault()
        self._waiting_bytes = 0
        self.blocks: deque[Block] = deque()
        self.reason: str | None = None
        self.called_at: float | None = None  # monotonic, the last call
        self.writing_since: float | None = None  # monotonic; set by whoever hands blocks on
        self.flagged = 0  # blocks with a flag after the pre-roll
        self.peak = 0.0  # largest sent since last asked, digital

    @property
    def finished(self) -> bool:
        """Whether all has been sent."""
        return self._playback.finished

    @property
    def position(self) -> int:
        """Frames sent."""
        return self._playback.position

    def stop(self, reason: str) -> None:
        """Ramp to the bias and end; the first reason stays."""
        self.reason = self.reason or reason
        self._playback.stop()

    def __call__(self, incoming: Float32s, outgoing: Float32s, flags: int) -> bool:
        """One block; False when all is sent (the rest of the block is 0)."""
        self.called_at = time.monotonic()
        first = self._playback.position
        try:
            sent = self._playback.next(len(outgoing))
        except Exception as fault:  # the samples cannot be read any more
            self.stop(f"fault in the stream: {type(fault).__name__}: {fault}")
            sent = self._playback.next(len(outgoing))
        outgoing[:] = 0
        outgoing[:, self._drive] = sent
        try:
            self._keep(first, sent, incoming, flags)
        except Exception as fault:
            self.stop(f"fault in the stream: {type(fault).__name__}: {fault}")
        return not self._playback.finished

    def taken(self, block: Block) -> None:
        """The block has been handed on."""
        self._waiting_bytes -= block.frames.nbytes

    def _keep(self, first: int, sent: Float32s, incoming: Float32s, flags: int) -> None:
        frames = np.empty((len(sent), COLUMNS), dtype=np.float32)
        frames[:, 0] = sent
        frames[:, 1] = 0 if self._loopback is None else incoming[:, self._loopback]
        frames[:, 2] = incoming[:, self._angle]
        self.blocks.append(Block(first_frame=first, flags=flags, frames=frames))
        self._waiting_bytes += frames.nbytes
        self.flagged += bool(flags) and first >= self.angle_guard.profile_from
        self.peak = max(self.peak, float(np.max(np.abs(sent), initial=0.0)))
        if self._fault is not None and 0 <= self._fault_frame <= first:
            self._fail(self._fault)
        if not self._playback.stopped and (reason := self.angle_guard.look(first, frames[:, 2])) is not None:
            self.stop(reason)
        self._watch_queue()

    def _watch_queue(self) -> None:
        since = self.writing_since
        if (since is not None and time.monotonic() - since > NOT_TAKEN) or self._waiting_bytes > MOST_WAITING:
            self.stop("the recording process does not take the data; the computer is too busy, or the disk too slow")
        elif self._waiting_bytes > MOST_WAITING // 2:
            time.sleep(0.002)  # only a stream much faster than real time comes here

    def _fail(self, fault: PlantedFault) -> None:
        self._fault = None
        if fault.kind == "stall":
            time.sleep(0.5)
        else:
            raise RuntimeError(f"planted {fault.kind}")
