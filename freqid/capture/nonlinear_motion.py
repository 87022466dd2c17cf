"""How does the rig move with dry friction, a spring that is not straight, or end stops? Step by step, event by event.

    theta'' + 2 zeta wn theta' + wn^2 (theta + q theta^2 + k theta^3) = wn^2 (K u(t) - f)

f is the Coulomb friction as an angle: opposite to the motion and `dry_friction` while slipping, anything up to
`static_friction` while sticking. At the stops the rate is reversed and multiplied by `restitution` (Newton's law of
impact); a bounce slower than 1/1000 of wn times the stop angle ends in resting contact until the force points away.

Between events the linear part is propagated exactly (`freqid.held_response` has the formula); the spring's curvature
acts in half kicks before and after each step (Strang splitting). Reversals and impacts are located inside their step,
so friction and stops are exact but for rounding; the natural frequency of a curved spring is off by (wn h)^2 / 8 of
its relative change at most, with wn h <= 0.02 unless told: 5e-5 of the change.

Source: J. P. Den Hartog, Trans. ASME 53 (1931) APM-107 (Coulomb friction, piecewise linear); G. Strang, SIAM J. Numer.
Anal. 5 (1968) 506-517.
"""

from __future__ import annotations

import math
from array import array
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.capture.motion_path import MotionPath
from freqid.errors import CaptureError
from freqid.held_response import Drive
from freqid.second_order import SecondOrder

__all__ = ["Nonlinearity", "stepped_motion"]

Floats = NDArray[np.float64]

STEP_ANGLE = 0.02  # rad of the natural frequency per step
SLOWEST_BOUNCE = 1e-3  # of wn times the stop angle
ROOT_STEPS = 40


@dataclass(frozen=True, slots=True, kw_only=True)
class Nonlinearity:
    """What bends the equation of motion; angles in the rig's unit, counted from rest.

    `static_friction` below `dry_friction` counts as equal to it. The spring's torque is
    theta (1 + `quadratic` theta + `cubic` theta^2).
    """

    dry_friction: float = 0.0
    static_friction: float = 0.0
    cubic: float = 0.0
    quadratic: float = 0.0
    stop: float = math.inf
    restitution: float = 0.5

    @property
    def is_none(self) -> bool:
        """Whether the rig is linear after all."""
        return self.dry_friction == self.static_friction == self.cubic == self.quadratic == 0 and math.isinf(self.stop)


def stepped_motion(
    drive: Drive, model: SecondOrder, bent: Nonlinearity, *, after: float = 1.0, step_angle: float = STEP_ANGLE
) -> MotionPath:
    """The angle of a rig at rest that the drive sets in motion, counted from rest, without delay.

    Parameters
    ----------
    after
        How long to go on after the drive's last sample, s.
    step_angle
        Longest step in radians of the natural frequency.

    Raises
    ------
    CaptureError
        The spring lets the rig run away.
    """
    wn = 2 * math.pi * model.natural_frequency
    h, equilibrium, slope = _on_steps(drive, step_angle / wn, after)
    rig = _SteppedRig(wn=wn, zeta=model.damping_ratio, bent=bent, h=h)
    time, angle, rate = rig.run(drive.start, (model.gain * equilibrium).tolist(), (model.gain * slope).tolist())
    if not np.all(np.isfinite(angle)) or np.max(np.abs(angle)) > 1e6:
        raise CaptureError(
            f"the simulated rig runs away: a spring with a cubic part of {bent.cubic:.3g} and a quadratic part of"
            f" {bent.quadratic:.3g} does not hold it; soften the spring less or drive it less"
        )
    return MotionPath(time=time, angle=angle, rate=rate)


def _on_steps(drive: Drive, longest: float, after: float) -> tuple[float, Floats, Floats]:
    """Step length, voltage at each step's start and its slope; steps divide the drive's interval or hold whole ones."""
    per_interval = math.ceil(drive.interval / longest - 1e-9)
    if per_interval == 1 and drive.interval <= longest / 2:
        whole = int(longest / drive.interval)
        h = whole * drive.interval
        n = math.ceil((drive.stop - drive.start + after) / h)
        edges = np.asarray(drive.start + h * np.arange(n + 1), dtype=np.float64)
        # the mean of each step: what the rig sees differs by (wn h)^2 / 24
        return h, np.diff(drive.integral_at(edges)) / h, np.zeros(n)
    h = drive.interval / per_interval
    inside = h * np.arange(per_interval)
    value = (drive.value[:, None] + drive.slope[:, None] * inside).ravel()
    slope = np.repeat(drive.slope, per_interval)
    more = math.ceil(after / h)
    last = float(drive.value[-1])
    return h, np.concatenate([value, np.full(more, last)]), np.concatenate([slope, np.zeros(more)])


class _SteppedRig:
    """One rig on its way; the equation is divided by wn^2, so forces are angles."""

    def __init__(self, *, wn: float, zeta: float, bent: Nonlinearity, h: float) -> None:
        self._wn, self._zeta, self._h = wn, zeta, h
        self._kinetic = bent.dry_friction
        self._static = max(bent.dry_friction, bent.static_friction)
        self._cubic, self._quadratic = bent.cubic, bent.quadratic
        self._stop, self._restitution = bent.stop, bent.restitution
        self._time, self._angle, self._rate = array("d"), array("d"), array("d")

    def run(self, start: float, equilibrium: list[float], slope: list[float]) -> tuple[Floats, Floats, Floats]:
        """Knots (time, angle, rate) from rest at `start`, one step per entry of `equilibrium`."""
        h, offset = self._h, 2 * self._zeta / self._wn
        p11, p12, p21, p22 = self._transition(h)
        cubic, quadratic, kick = self._cubic, self._quadratic, h / 2 * self._wn**2
        curved = cubic != 0 or quadratic != 0
        rubs, stop = self._static > 0, self._stop
        x = v = direction = 0.0
        held = rubs
        self._put(start, x, v)
        put_time, put_angle, put_rate = self._time.append, self._angle.append, self._rate.append
        for k, (level, s) in enumerate(zip(equilibrium, slope, strict=True)):
            if held:
                force = level - x - x * x * (quadratic + cubic * x)
                direction, begin = self._release_within(force, s, x)
                if direction == 0:
                    self._put(start + (k + 1) * h, x, 0.0)
                    continue
                held = False
                if begin > 0:
                    x, v, direction, held = self._through_events((x, 0.0, direction), level, s, start + k * h, begin)
                    self._put(start + (k + 1) * h, x, v)
                    continue
            if curved:
                v -= kick * x * x * (quadratic + cubic * x)
            centre = level - s * offset - direction * self._kinetic
            dx, dv = x - centre, v - s
            x1 = centre + s * h + p11 * dx + p12 * dv
            v1 = s + p21 * dx + p22 * dv
            if (rubs and v1 * direction < 0) or x1 > stop or x1 < -stop:
                x1, v1, direction, held = self._through_events((x, v, direction), level, s, start + k * h)
            if curved and not held:
                v1 -= kick * x1 * x1 * (quadratic + cubic * x1)
                if not -1e9 < x1 < 1e9:
                    break
            x, v = x1, v1
            if rubs and not held and v * direction < 0:
                direction = -direction
            put_time(start + (k + 1) * h)
            put_angle(x)
            put_rate(v)
        return np.array(self._time), np.array(self._angle), np.array(self._rate)

    def _put(self, time: float, x: float, v: float) -> None:
        self._time.append(time)
        self._angle.append(x)
        self._rate.append(v)

    def _released(self, force: float, x: float) -> float:
        """Direction in which a standing rig sets off under `force` (an angle), 0 while it is held."""
        if abs(x) >= self._stop and force * x >= 0:
            return 0.0
        if abs(force) <= self._static:
            return 0.0
        return math.copysign(1.0, force)

    def _release_within(self, force: float, s: float, x: float) -> tuple[float, float]:
        """Direction in which a standing rig sets off during a step, and when (s from the step's start)."""
        direction = self._released(force, x)
        if direction != 0 or s == 0:
            return direction, 0.0
        direction = self._released(force + s * self._h, x)
        return direction, (direction * self._static - force) / s if direction else 0.0

    def _through_events(
        self, state: tuple[float, float, float], level: float, s: float, start: float, done: float = 0.0
    ) -> tuple[float, float, float, bool]:
        """One step with reversals and impacts: angle, rate, direction of friction, and whether the rig is held."""
        x, v, direction = state
        offset = 2 * self._zeta / self._wn
        for _ in range(ROOT_STEPS):
            centre = level + s * (done - offset) - direction * self._kinetic
            when, impact = self._first_event(x, v, centre, s, direction, self._h - done)
            x, v = self._moved(x, v, centre, s, when)
            done += when
            if done >= self._h * (1 - 1e-12):
                return x, v, direction, False
            self._put(start + done, x, v)
            force = level + s * done - x - x * x * (self._quadratic + self._cubic * x)
            if impact:
                x = math.copysign(self._stop, x)
                v = -self._restitution * v
                resting = abs(v) < SLOWEST_BOUNCE * self._wn * self._stop
            else:
                v, resting = 0.0, True
            if resting:
                v = 0.0
                direction = self._released(force, x)
                if direction == 0:
                    self._put(start + done, x, v)
                    return x, v, 0.0, True
            elif self._static > 0:
                direction = math.copysign(1.0, v)
            self._put(start + done, x, v)
        return x, v, direction, False

    def _first_event(
        self, x: float, v: float, centre: float, s: float, direction: float, longest: float
    ) -> tuple[float, bool]:
        """Time of the first reversal (under friction) or impact within `longest`; `longest` where there is none."""
        x1, v1 = self._moved(x, v, centre, s, longest)
        when, impact = longest, False
        if self._static > 0 and v1 * direction < 0:
            when = self._root(lambda t: self._moved(x, v, centre, s, t)[1] * direction, longest)
            x1 = self._moved(x, v, centre, s, when)[0]
        if abs(x1) > self._stop:
            side = math.copysign(1.0, x1)
            when = self._root(lambda t: self._stop - side * self._moved(x, v, centre, s, t)[0], when)
            impact = True
        return when, impact

    @staticmethod
    def _root(positive_before: Callable[[float], float], longest: float) -> float:
        """Where a function that ends negative at `longest` turns negative (bisection to rounding)."""
        low, high = 0.0, longest
        for _ in range(ROOT_STEPS):
            middle = (low + high) / 2
            if positive_before(middle) >= 0:
                low = middle
            else:
                high = middle
        return low

    def _moved(self, x: float, v: float, centre: float, s: float, time: float) -> tuple[float, float]:
        p11, p12, p21, p22 = self._transition(time)
        dx, dv = x - centre, v - s
        return centre + s * time + p11 * dx + p12 * dv, s + p21 * dx + p22 * dv

    def _transition(self, time: float) -> tuple[float, float, float, float]:
        """exp(A time), row by row."""
        wn, zeta = self._wn, self._zeta
        if zeta < 1:
            wd = wn * math.sqrt((1 - zeta) * (1 + zeta))
            decay = math.exp(-zeta * wn * time)
            c, sn = decay * math.cos(wd * time), decay * (math.sin(wd * time) / wd)
        else:
            alpha = wn * math.sqrt((zeta - 1) * (zeta + 1))
            slow, fast = math.exp(-(wn**2) / (zeta * wn + alpha) * time), math.exp(-(zeta * wn + alpha) * time)
            c = (slow + fast) / 2
            sn = time * slow if alpha * time < 1e-8 else (slow - fast) / (2 * alpha)
        return c + zeta * wn * sn, sn, -(wn**2) * sn, c - zeta * wn * sn
