"""When must a running test be stopped for the rig's sake?

`AngleGuard` looks at every block as it comes: the angle, counted from its mean over the last part of the pre-roll, must
stay within a share of the way to the stops, and the sensor must not stand at its own full scale. `LoopbackGuard`
looks at the recorded voltage: it must keep the voltage limit at once, and follow what was sent (up to a gain and a
constant delay, found while it runs) all along.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from freqid.capture.sound.interface import Float32s
from freqid.capture.sound.loopback_match import LoopbackMatch, match_about, match_loopback

__all__ = ["CLIPPED", "AngleGuard", "GuardLimits", "LoopbackGuard"]

CLIPPED = 0.9999  # of full scale
PERSISTING = 0.0005  # s beyond a limit that are no spike
REST_WINDOW = 0.5  # s before the profile over which the rest angle is averaged
LOOPBACK_OVER_LIMIT = 1.05  # of the voltage limit: its own scale is known to some per cent
DEPARTED = 0.15  # rms over a window, of the largest departure of the profile from the bias
LARGEST_DELAY = 1.0  # s
FIRST_LOOK = 3.0  # s of moving voltage until the delay is found
WINDOW = 0.25  # s
MOVING = 0.05  # rms about a straight line, of the largest departure
SMALLEST_GAIN = 0.01  # below it a channel shows crosstalk
CLOSE = 0.03  # residual, of the voltage in the window, with which a match is taken
SMALL_CHANGE = 0.1  # of the gain
SETTLED = 3.0  # s after which a match is no longer looked for anew
VAGUE = 10.0  # a match is taken when its vagueness is smaller than what is allowed by this
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class GuardLimits:
    """What the guards hold on to; angles in the rig's unit, voltages in V.

    `angle` is the largest angle allowed, counted from rest; `angle_full_scale` and `loopback_full_scale` are those of
    the two inputs; `largest_departure` is that of the profile from the bias. Groups of `thinning` frames are enough to
    see whether the loopback follows.
    """

    sample_rate: float
    pre_roll_frames: int
    angle: float
    angle_unit: str
    angle_full_scale: float
    voltage: float
    loopback_full_scale: float
    output_full_scale: float
    largest_departure: float
    thinning: int = 1

    def frames(self, seconds: float) -> int:
        """At least one frame."""
        return max(1, round(seconds * self.sample_rate))

    @classmethod
    def from_json(cls, data: dict[str, Any]) -> GuardLimits:
        """Back from `dataclasses.asdict`."""
        return cls(**data)


class AngleGuard:
    """Looks at the angle channel block by block, cheap enough for the stream's own thread."""

    def __init__(self, limits: GuardLimits) -> None:
        self._limits = limits
        self._rest_from = limits.pre_roll_frames - limits.frames(REST_WINDOW)
        self._sum, self._count = 0.0, 0
        self._most_beyond = limits.frames(PERSISTING)
        self.clipped = 0
        self.latest = 0.0  # angle from rest, mean of the last block
        self.largest = 0.0  # magnitude from rest

    @property
    def profile_from(self) -> int:
        """The first frame of the profile."""
        return self._limits.pre_roll_frames

    @property
    def rest(self) -> float:
        """Mean angle before the profile, 0 while that is not known."""
        return self._sum / self._count if self._count else 0.0

    def look(self, first_frame: int, angle: Float32s) -> str | None:
        """The reason to stop, or None; `angle` (n,) in digital full scale."""
        limits = self._limits
        clipped = int(np.count_nonzero(np.abs(angle) >= CLIPPED))
        self.clipped += clipped
        degrees = angle * limits.angle_full_scale
        if not np.all(np.isfinite(degrees)):
            return "guard: angle is not a number; check the sensor and the interface"
        if first_frame < limits.pre_roll_frames:
            resting = degrees[max(0, self._rest_from - first_frame) : limits.pre_roll_frames - first_frame]
            self._sum, self._count = self._sum + float(np.sum(resting)), self._count + resting.size
        deviation = degrees - self.rest
        self.latest = float(np.mean(deviation))
        if first_frame + angle.size <= limits.pre_roll_frames:
            return self._clipping(clipped, angle.size)
        size = np.abs(deviation)
        self.largest = max(self.largest, float(np.max(size)))
        if np.count_nonzero(size > limits.angle) >= min(self._most_beyond, angle.size):
            return (
                f"guard: angle {float(np.max(size)):.4g} {limits.angle_unit} from rest, {limits.angle:.4g} is the most"
                " allowed ([limits] angle times --guard); lower the level, or design the profile anew"
            )
        return self._clipping(clipped, angle.size)

    def _clipping(self, clipped: int, n_frames: int) -> str | None:
        if clipped < min(self._most_beyond, n_frames):
            return None
        return (
            f"guard: angle sensor at its full scale ({self._limits.angle_full_scale:g} {self._limits.angle_unit}), so"
            " the angle is not seen any more; lower the level, or widen its range and [angle_sensor] full_scale"
        )


class LoopbackGuard:
    """Looks at sent and recorded voltage (V, profile and later) in windows, outside the stream's own thread."""

    def __init__(self, limits: GuardLimits) -> None:
        self._limits = limits
        self._most = self._groups(LARGEST_DELAY)
        self._window = self._groups(WINDOW)
        self._fresh = np.empty((0, 2))  # frames of a group that is not whole yet
        self._sent, self._recorded = np.empty(0), np.empty(0)
        self._silent = 0  # windows of moving voltage that the loopback did not show
        self._match: LoopbackMatch | None = None
        self._windows = 0  # since the match was made
        self.clipped = 0

    def look(self, sent: Float32s, recorded: Float32s) -> str | None:
        """The reason to stop, or None; both (n,) in digital full scale, the frames in their order."""
        limits = self._limits
        self.clipped += int(np.count_nonzero(np.abs(recorded) >= CLIPPED))
        voltage = recorded * np.float64(limits.loopback_full_scale)
        beyond = np.abs(voltage) > LOOPBACK_OVER_LIMIT * limits.voltage
        if np.count_nonzero(beyond) >= min(limits.frames(PERSISTING), voltage.size):
            return (
                f"guard: loopback {float(np.max(np.abs(voltage))):.4g} V, [limits] voltage is {limits.voltage:g} V;"
                " check the output's gain, and [output] full_scale and loopback_full_scale with --calibrate"
            )
        self._take(np.stack([sent * np.float64(limits.output_full_scale), voltage], axis=1))
        while self._sent.size >= self._most + self._window:
            if (reason := self._look_at_window()) is not None:
                return reason
            self._sent, self._recorded = self._sent[self._window :], self._recorded[self._window :]
        return None

    def _groups(self, seconds: float) -> int:
        return max(4, round(seconds * self._limits.sample_rate / self._limits.thinning))

    def _take(self, frames: Floats) -> None:
        """Means over groups of frames: the guard has to be cheap beside a running stream."""
        fresh = np.concatenate([self._fresh, frames])
        whole = len(fresh) // self._limits.thinning * self._limits.thinning
        means = fresh[:whole].reshape(-1, self._limits.thinning, 2).mean(axis=1)
        self._fresh = fresh[whole:]
        self._sent = np.concatenate([self._sent, means[:, 0]])
        self._recorded = np.concatenate([self._recorded, means[:, 1]])

    def _look_at_window(self) -> str | None:
        size = self._most + self._window
        sent, recorded = self._sent[:size], self._recorded[:size]
        if self._match is None:
            return self._find(sent, recorded)
        whole, part = divmod(max(0.0, self._match.delay), 1.0)
        later = sent[self._most - int(whole) : size - int(whole)]
        earlier = sent[self._most - int(whole) - 1 : size - int(whole) - 1]
        expected = self._match.gain * ((1 - part) * later + part * earlier) + self._match.offset
        departure = float(np.sqrt(np.mean((recorded[self._most :] - expected) ** 2)))
        allowed = DEPARTED * abs(self._match.gain) * self._limits.largest_departure
        self._windows += 1
        if departure <= allowed:
            self._refine(self._match, sent, recorded)
            return None
        if self._windows * WINDOW < SETTLED and self._is_found_again(sent, recorded):
            return None
        return (
            f"guard: loopback departs from the voltage sent by {departure:.3g} V rms, {allowed:.3g} V is allowed;"
            " frames were lost on the way, or a cable is off"
        )

    def _refine(self, match: LoopbackMatch, sent: Floats, recorded: Floats) -> None:
        """Follow small changes: a first match made of a narrow band or a weak motion is a little off."""
        if _motion(sent) < MOVING * self._limits.largest_departure:
            return
        better = match_about(max(0, match.lag + round(match.fraction)), sent, recorded)
        near = abs(better.fraction) <= 1 and abs(better.gain / match.gain - 1) < SMALL_CHANGE
        if near and self._is_clear(better, sent):
            self._match = better

    def _is_found_again(self, sent: Floats, recorded: Floats) -> bool:
        """Whether another match fits: early in a run one may have been made of one edge alone."""
        self._match = None
        self._find(sent, recorded)
        return self._match is not None

    def _is_clear(self, match: LoopbackMatch, sent: Floats) -> bool:
        size = abs(match.gain)
        allowed = DEPARTED * size * self._limits.largest_departure
        shown = sent[: sent.size - match.lag]  # what has come back within the window
        return (
            _motion(shown) > MOVING * self._limits.largest_departure
            and match.residual < CLOSE * size * float(np.std(shown))
            and VAGUE * match.vagueness < allowed
        )

    def _find(self, sent: Floats, recorded: Floats) -> str | None:
        if _motion(sent) < MOVING * self._limits.largest_departure:
            return None
        match = match_loopback(sent, recorded, most=self._most // 2)
        follows = match is not None and match.residual < DEPARTED * abs(match.gain) * float(np.std(sent))
        if match is not None and follows and abs(match.gain) > SMALLEST_GAIN:
            self._match, self._windows = (match, 0) if self._is_clear(match, sent) else (None, 0)
            return None
        self._silent += 1
        if self._silent * WINDOW > FIRST_LOOK:
            return (
                "guard: loopback does not show the voltage that is sent; connect it to its input, name the channel"
                " with --loopback-channel, or do without: --loopback-channel none"
            )
        return None


def _motion(voltage: Floats) -> float:
    """RMS of what a straight line leaves: along a straight line a shift looks like an offset."""
    order = np.arange(voltage.size) - (voltage.size - 1) / 2
    level = voltage - np.mean(voltage)
    return float(np.std(level - order * (order @ level) / (order @ order)))
