"""Is a finished run what it should be? Every frame there, none lost, the voltage recorded as it was sent.

`Verification` is fed the blocks of a journal in their order and never holds more than some seconds of them. It
checks that the frames follow each other without a gap and are as many as planned, that no flag came after
the pre-roll, and that the loopback equals the voltage sent up to a gain, an offset and one constant delay: chunk by
chunk the shift against the delay found at the beginning is estimated (`loopback_match`), so frames lost anywhere show
as a step of the delay, however silently they were lost.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from freqid.capture.sound.guard import CLIPPED
from freqid.capture.sound.interface import flag_words
from freqid.capture.sound.loopback_match import LoopbackMatch, match_loopback, shift_since
from freqid.capture.sound.messages import Block
from freqid.capture.sound.playback import PlaybackPlan

__all__ = ["Verification", "Verified"]

FIRST_PART = 6.0  # s of moving voltage from which the delay is found
LARGEST_DELAY = 1.0  # s
CHUNK = 0.5  # s
MOVING = 0.02  # of the largest departure: below it a chunk tells nothing of the delay
STEP = 0.5  # frames: no loss is smaller than one
SURE = 6.0  # standard uncertainties
DIFFERING = 0.05  # rms of what remains in a chunk, of the largest departure
GAIN_WITHIN = 0.02  # beyond it the run says that the loopback is not calibrated
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Verified:
    """What the verification found; `problems` is empty where all is well. Delay in frames, None without a loopback."""

    frames: int
    expected_frames: int
    flagged: int
    clipped: int
    delay: float | None
    gain: float | None
    largest_shift: float | None
    largest_remainder: float | None
    problems: tuple[str, ...]

    def as_json(self) -> dict[str, Any]:
        """Every figure, for scripts."""
        names = ("frames", "expected_frames", "flagged", "clipped", "delay", "gain", "largest_shift",
                 "largest_remainder")  # fmt: skip
        return {**{name: getattr(self, name) for name in names}, "problems": list(self.problems)}


class Verification:
    """Fed with `take`, asked with `result`. Voltages in V; `loopback_full_scale` None: no loopback."""

    def __init__(self, plan: PlaybackPlan, *, loopback_full_scale: float | None, largest_departure: float) -> None:
        self._plan = plan
        self._loopback = None if loopback_full_scale is None else _LoopbackCheck(
            plan, loopback_full_scale, largest_departure
        )  # fmt: skip
        self._frames, self._flagged, self._clipped = 0, 0, 0
        self._problems: list[str] = []

    def take(self, block: Block) -> None:
        """The next block of the journal."""
        if block.first_frame != self._frames:
            self._tell(f"{block.first_frame - self._frames} frames are missing at {self._instant(self._frames)}")
            self._frames = block.first_frame
        begin = max(0, self._plan.pre_roll_frames - block.first_frame)
        if block.flags and not begin:
            self._flagged += 1
            self._tell(f"{flag_words(block.flags)} at {self._instant(block.first_frame)}")
        frames = block.frames[begin:]
        self._clipped += int(np.count_nonzero(np.abs(frames[:, 1:]) >= CLIPPED))
        self._frames += len(block.frames)
        if self._loopback is not None and len(frames):
            self._loopback.take(frames)

    def result(self, *, played_out: bool = True) -> Verified:
        """What was found; asked once, at the end. Where it was not `played_out`, no frames are missed at its end."""
        expected = self._plan.n_frames
        if played_out and self._frames < expected:
            self._tell(f"{self._frames} frames were recorded of the {expected} that were to be sent")
        if self._clipped:
            self._tell(f"{self._clipped} samples stand at the inputs' full scale")
        check = self._loopback
        if check is not None:
            check.finish()
            for problem in check.problems:
                self._tell(problem)
        match = check.match if check else None
        return Verified(
            frames=self._frames,
            expected_frames=expected,
            flagged=self._flagged,
            clipped=self._clipped,
            delay=match.delay if match else None,
            gain=match.gain if match else None,
            largest_shift=check.largest_shift if check and match else None,
            largest_remainder=check.largest_remainder if check and match else None,
            problems=tuple(self._problems),
        )

    def _tell(self, problem: str) -> None:
        if len(self._problems) < 5:
            self._problems.append(problem)

    def _instant(self, frame: int) -> str:
        return f"{(frame - self._plan.pre_roll_frames) / self._plan.sample_rate:.3f} s"


class _LoopbackCheck:
    """Sent and recorded voltage from the profile's first frame on, chunk by chunk."""

    def __init__(self, plan: PlaybackPlan, full_scale: float, largest_departure: float) -> None:
        self._plan, self._full_scale, self._departure = plan, full_scale, largest_departure
        self._most = max(2, round(LARGEST_DELAY * plan.sample_rate))
        self._chunk = max(8, round(CHUNK * plan.sample_rate))
        self._sent, self._recorded = np.empty(0), np.empty(0)
        self._parts: list[tuple[Floats, Floats]] = []
        self._n_parts = 0
        self._at = 0  # frame of the profile that self._recorded begins with
        self.match: LoopbackMatch | None = None
        self.problems: list[str] = []
        self._shifts = (0.0, 0.0)
        self.largest_shift = self.largest_remainder = 0.0

    def take(self, frames: NDArray[np.float32]) -> None:
        sent = frames[:, 0] * np.float64(self._plan.full_scale)
        self._parts.append((sent, frames[:, 1] * np.float64(self._full_scale)))
        self._n_parts += len(frames)
        wanted = self._chunk if self.match else round(FIRST_PART * self._plan.sample_rate) + self._most
        if self._n_parts >= wanted:
            self._join()
            self._look()

    def finish(self) -> None:
        """Look at what is left."""
        self._join()
        if self.match is None:
            self._find()
        self._look_at_chunks()
        if self.match is None:
            self.problems.append("the loopback does not show the voltage that was sent")

    def _join(self) -> None:
        self._sent = np.concatenate([self._sent, *(part[0] for part in self._parts)])
        self._recorded = np.concatenate([self._recorded, *(part[1] for part in self._parts)])
        self._parts, self._n_parts = [], 0

    def _look(self) -> None:
        if self.match is None:
            moving = np.flatnonzero(np.abs(self._sent - self._plan.bias) > MOVING * self._departure)
            enough = round(FIRST_PART * self._plan.sample_rate)
            if moving.size == 0:  # the profile rests: nothing to find a delay in yet
                keep = min(self._sent.size, self._most)
                self._at += self._sent.size - keep
                self._sent, self._recorded = self._sent[-keep:], self._recorded[-keep:]
                return
            if self._sent.size - moving[0] < enough:
                return
            self._find()
            if self.match is None:
                return
        self._look_at_chunks()

    def _find(self) -> None:
        match = match_loopback(self._sent, self._recorded, most=min(self._most, self._sent.size // 2))
        if match is not None and abs(match.gain) > 0.01 and match.residual < 0.5 * abs(match.gain) * self._departure:
            self.match = match

    def _look_at_chunks(self) -> None:
        """Chunks of the recorded voltage, each with the sent voltage from a lag before it to one frame after it."""
        if self.match is None:
            return
        lag, begin = self.match.lag, self.match.lag + 1
        while begin + self._chunk <= self._recorded.size:
            sent = self._sent[begin - lag - 1 : begin - lag + self._chunk + 1]
            if sent.size < self._chunk + 2:
                break
            self._look_at_chunk(sent, self._recorded[begin : begin + self._chunk], self._at + begin)
            begin += self._chunk
        used = begin - lag - 1
        self._sent, self._recorded, self._at = self._sent[used:], self._recorded[used:], self._at + used

    def _look_at_chunk(self, sent: Floats, recorded: Floats, frame: int) -> None:
        match, rate = self.match, self._plan.sample_rate
        if match is None:
            return
        shift, uncertainty, remainder = shift_since(match, sent, recorded)
        self.largest_remainder = max(self.largest_remainder, remainder)
        moves = float(np.ptp(sent)) > MOVING * self._departure
        if moves and uncertainty * SURE < STEP:
            self._shifts = (min(self._shifts[0], shift), max(self._shifts[1], shift))
            self.largest_shift = max(self.largest_shift, abs(shift))
            if self._shifts[1] - self._shifts[0] > STEP:  # the delay of the match may lie between two
                self._report(
                    f"the delay of the loopback is off by {shift:.1f} frames at {frame / rate:.2f} s (frames lost, or"
                    " not DC-coupled)"
                )
                return
        if remainder > DIFFERING * abs(match.gain) * self._departure:
            self._report(
                f"the loopback differs from the voltage sent by {remainder:.3g} V rms at {frame / rate:.2f} s (frames"
                " lost, or not DC-coupled)"
            )

    def _report(self, problem: str) -> None:
        if not self.problems:  # the first says it: later chunks repeat it
            self.problems.append(problem)
