"""What does an imperfect sensor make of the motion? A path in, the path that the sensor sees out.

Play (backlash) between shaft and sensor: the sensor stays where it is while the shaft crosses the gap and is carried
along at its edges. A first-order lag is solved exactly for a path that is cubic between its knots.
Source: M. Krasnosel'skii & A. Pokrovskii, *Systems with Hysteresis*, 1989, ch. 2 (the play operator).
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from freqid.capture.motion_path import MotionPath
from freqid.held_response import Drive, HeldResponse

__all__ = ["lagged", "linear_path", "with_play"]

Floats = NDArray[np.float64]


def linear_path(
    drive: Drive, natural_frequency: float, damping_ratio: float, *, step: float, after: float
) -> MotionPath:
    """The exact path of a linear rig of unit gain, knots every `step` s at most, until `after` s after the drive."""
    n = math.ceil((drive.stop + after - drive.start) / step)
    time = np.linspace(drive.start, drive.stop + after, n + 1)
    response = HeldResponse(drive, natural_frequency, damping_ratio)
    return MotionPath(time=time, angle=response.at(time), rate=response.rate_at(time))


def with_play(path: MotionPath, gap: float) -> MotionPath:
    """Seen through a play of `gap` (angle from edge to edge), at its middle at the start.

    The instant at which the shaft takes the sensor along is placed on the straight line between two knots.
    """
    half = gap / 2
    seen, t_last, x_last = float(path.angle[0]), float(path.time[0]), float(path.angle[0])
    standing = True
    times, angles, rates = [], [], []
    for t, x, v in zip(path.time.tolist(), path.angle.tolist(), path.rate.tolist(), strict=True):
        carried = min(max(seen, x - half), x + half)
        if carried == seen:
            standing, rate = True, 0.0
        else:
            if standing and x != x_last:
                edge = seen + half if x > seen else seen - half
                taken = t_last + (t - t_last) * (edge - x_last) / (x - x_last)
                times += [taken, taken]
                angles += [seen, seen]
                rates += [0.0, v]
            standing, rate = False, v
        seen = carried
        times.append(t)
        angles.append(seen)
        rates.append(rate)
        t_last, x_last = t, x
    return MotionPath(time=np.array(times), angle=np.array(angles), rate=np.array(rates))


def lagged(path: MotionPath, time_constant: float) -> MotionPath:
    """Behind a first-order lag y + T y' = x, at rest at the start.

    A cubic x has the particular solution x - T x' + T^2 x'' - T^3 x'''; the rest decays with T.
    """
    t = time_constant
    h = np.diff(path.time)
    safe = np.where(h > 0, h, 1.0)
    x0, x1, v0, v1 = path.angle[:-1], path.angle[1:], path.rate[:-1], path.rate[1:]
    second = (6 * (x1 - x0) / safe - 4 * v0 - 2 * v1) / safe
    third = (12 * (x0 - x1) / safe + 6 * (v0 + v1)) / safe**2
    begin = x0 - t * v0 + t**2 * second - t**3 * third
    end = x1 - t * v1 + t**2 * (second + third * h) - t**3 * third
    decay = np.exp(-h / t)
    y = float(path.angle[0])
    seen = [y]
    for b, e, d, width in zip(begin.tolist(), end.tolist(), decay.tolist(), h.tolist(), strict=True):
        if width > 0:
            y = e + (y - b) * d
        seen.append(y)
    angle = np.array(seen)
    return MotionPath(time=path.time, angle=angle, rate=(path.angle - angle) / t)
