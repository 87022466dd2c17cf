"""What is sent, sample by sample, from the first to the last, and how does it come to rest from anywhere?

    ramp 0 to bias, bias (together the pre-roll)  |  profile  |  bias 0.5 s  |  [ramp to 0, 0 for 0.25 s]

The part in brackets only where the bias is not 0: a stream that ends leaves 0 V at most outputs. A stop, from
wherever it comes, replaces all that is still to come by a ramp from the last value sent to the bias and the same end.
Ramps are raised cosines of 50 ms, longer where the slew rate or the profile's own largest step (then up to 0.5 s)
asks for it: the slope of a raised cosine is at most pi / 2 times its change over its duration.

Samples are in digital full scale, float32, and never beyond the voltage limit: the limit is rounded towards zero.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from freqid.capture.sound.interface import Float32s

__all__ = ["PRE_ROLL", "Playback", "PlaybackPlan", "digital_samples"]

PRE_ROLL = 1.0  # s at least; the first blocks of a stream may get lost
TAIL = 0.5  # s of bias before the stream ends: more than any round trip
REST = 0.25  # s of 0 V after a bias
SHORTEST_RAMP, LONGEST_FOR_SMOOTHNESS = 0.05, 0.5  # s

Part = Callable[[int, int], Float32s]


@dataclass(frozen=True, slots=True, kw_only=True)
class PlaybackPlan:
    """Everything but the samples. Voltages in V.

    `largest_step` is that of the profile from one sample to the next. Samples [loop_start, loop_stop) are played
    `n_loops` times. `pre_roll` is in s.
    """

    sample_rate: float
    full_scale: float
    bias: float
    voltage_limit: float
    slew_rate: float
    largest_step: float
    n_samples: int
    loop_start: int = 0
    loop_stop: int = 0
    n_loops: int = 1
    pre_roll: float = PRE_ROLL

    @property
    def pre_roll_frames(self) -> int:
        """Frames before the first sample of the profile, the ramp to the bias included."""
        return math.ceil(self.pre_roll * self.sample_rate) + (self.ramp_frames(self.bias) if self.bias else 0)

    @property
    def profile_frames(self) -> int:
        """Frames of the profile, loops included."""
        return self.n_samples + (self.n_loops - 1) * (self.loop_stop - self.loop_start)

    @property
    def n_frames(self) -> int:
        """Frames of the whole stream."""
        return self.pre_roll_frames + self.profile_frames + self.end_frames

    @property
    def end_frames(self) -> int:
        """Frames after the profile."""
        tail = math.ceil(TAIL * self.sample_rate)
        return tail + (self.ramp_frames(self.bias) + math.ceil(REST * self.sample_rate) if self.bias else 0)

    def ramp_frames(self, change: float) -> int:
        """Frames of a ramp over `change` V."""
        steepest = math.pi / 2 * abs(change)  # V per duration
        smooth = steepest / (self.sample_rate * self.largest_step) if self.largest_step > 0 else 0.0
        duration = max(SHORTEST_RAMP, min(smooth, LONGEST_FOR_SMOOTHNESS), steepest / self.slew_rate)
        return math.ceil(duration * self.sample_rate)

    def as_json(self) -> dict[str, Any]:
        """Every field, for the pipe and the journal."""
        return asdict(self)


def digital_samples(voltage: NDArray[np.float64], *, full_scale: float, voltage_limit: float) -> Float32s:
    """Voltage (M,) in V as samples in digital full scale, none beyond the limit by a rounding."""
    largest = np.float32(voltage_limit / full_scale)
    if float(largest) * full_scale > voltage_limit:
        largest = np.nextafter(largest, np.float32(0))
    return np.clip((np.asarray(voltage) / full_scale).astype(np.float32), -largest, largest)


class Playback:
    """The samples to send, asked for block by block; `stop` may come from another thread at any time."""

    def __init__(self, samples: Float32s, plan: PlaybackPlan) -> None:
        self._samples, self._plan = samples, plan
        self._bias = self._digital(plan.bias)
        self._parts: deque[tuple[int, Part]] = deque(self._whole())
        self._within = 0  # the first part
        self._last = 0.0
        self._stopping = self._stopped = False
        self.position = 0  # frames sent

    @property
    def finished(self) -> bool:
        """Whether everything has been sent."""
        return not self._parts

    @property
    def stopped(self) -> bool:
        """Whether it was told to stop before its end."""
        return self._stopping

    def stop(self) -> None:
        """From the next sample on, ramp to the bias and end."""
        self._stopping = True

    def next(self, n_frames: int) -> Float32s:
        """The next samples (n,); 0 when all is sent."""
        if self._stopping and not self._stopped:
            self._stopped = True
            self._parts = deque(self._end(self._last, from_anywhere=True))
            self._within = 0
        sent = np.zeros(n_frames, dtype=np.float32)
        filled = 0
        while filled < n_frames and self._parts:
            length, part = self._parts[0]
            stop = min(length, self._within + n_frames - filled)
            sent[filled : filled + stop - self._within] = part(self._within, stop)
            filled += stop - self._within
            self._within = stop
            if stop == length:
                self._parts.popleft()
                self._within = 0
        self.position += n_frames
        if n_frames:
            self._last = float(sent[-1])
        return sent

    def _whole(self) -> list[tuple[int, Part]]:
        plan, samples = self._plan, self._samples
        settle = math.ceil(plan.pre_roll * plan.sample_rate)
        parts = [_ramp(0.0, self._bias, plan.ramp_frames(plan.bias))] if plan.bias else []
        parts.append(_level(self._bias, settle))
        if plan.n_loops == 1:
            parts.append((plan.n_samples, lambda start, stop: samples[start:stop]))
        else:
            parts += [_slice(samples, 0, plan.loop_start), _loop(samples, plan),
                      _slice(samples, plan.loop_stop, plan.n_samples)]  # fmt: skip
        return [part for part in (*parts, *self._end(self._bias, from_anywhere=False)) if part[0] > 0]

    def _end(self, last: float, *, from_anywhere: bool) -> list[tuple[int, Part]]:
        plan = self._plan
        parts = [_level(self._bias, math.ceil(TAIL * plan.sample_rate))]
        if from_anywhere:
            change = abs(last - self._bias) * plan.full_scale
            parts.insert(0, _ramp(last, self._bias, plan.ramp_frames(change)))
        if plan.bias:
            parts += [_ramp(self._bias, 0.0, plan.ramp_frames(plan.bias)),
                      _level(0.0, math.ceil(REST * plan.sample_rate))]  # fmt: skip
        return parts

    def _digital(self, voltage: float) -> float:
        values = np.array([voltage])
        limit = self._plan.voltage_limit
        return float(digital_samples(values, full_scale=self._plan.full_scale, voltage_limit=limit)[0])


def _ramp(first: float, last: float, n_frames: int) -> tuple[int, Part]:
    def part(start: int, stop: int) -> Float32s:
        way = (1 - np.cos(np.pi * np.arange(start + 1, stop + 1) / n_frames)) / 2
        return (first + (last - first) * way).astype(np.float32)

    return n_frames, part


def _level(value: float, n_frames: int) -> tuple[int, Part]:
    return n_frames, lambda start, stop: np.full(stop - start, value, dtype=np.float32)


def _slice(samples: Float32s, first: int, last: int) -> tuple[int, Part]:
    return last - first, lambda start, stop: samples[first + start : first + stop]


def _loop(samples: Float32s, plan: PlaybackPlan) -> tuple[int, Part]:
    length = plan.loop_stop - plan.loop_start
    return plan.n_loops * length, lambda start, stop: samples[plan.loop_start + np.arange(start, stop) % length]
