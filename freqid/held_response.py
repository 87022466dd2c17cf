"""What does the rig do between the samples? Its exact angle at any instant, for a held voltage.

The voltage is piecewise linear on a uniform grid: a staircase (zero-order hold, slope 0) or straight
lines between samples of a smooth signal. Within each piece the second-order equation

    theta'' + 2 zeta wn theta' + wn^2 theta = wn^2 u(t)            (gain 1)

has the particular solution theta_p = u + s (t - 2 zeta / wn) for slope s, and what deviates from it decays as
exp(A t) with the closed 2 x 2 matrix exponential. So there is no time-stepping error; rounding is the
only error (about 1e-16 / (wn dt)^2 of the swing). The derivatives by natural frequency and damping ratio are exact in
the same way (`freqid.second_order_motion`). Exposure averages use the integral of the same equation:

    wn^2 * integral(theta) = wn^2 * integral(u) - [theta'] - 2 zeta wn [theta].

Before its first sample the voltage has stood at its first value for ever, and angles are counted from that rest;
after its last sample it stays. Source: the variation-of-constants formula, any text on linear systems
(for instance Astrom & Wittenmark, *Computer-Controlled Systems*, 3rd ed. 1997, ch. 2).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.block_recursion import BlockRecursion
from freqid.second_order_motion import damped_waves, moved, transition_matrix

__all__ = ["Drive", "HeldResponse", "MeanMotion", "free_decay", "free_decay_slopes"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Drive:
    """A voltage on a uniform grid, held or joined by straight lines.

    `value` (M,) V counts from rest (the first value is 0); `start` is the instant of its first sample, `interval` the
    spacing, both in s; `slope` (M,) V/s is zero for a staircase; `integral` (M,) V s is the exact running integral.
    """

    start: float
    interval: float
    value: Floats
    slope: Floats
    integral: Floats
    rest: float

    @classmethod
    def from_samples(cls, voltage: Floats, *, start: float, interval: float, smooth: bool) -> Drive:
        """Build from voltage samples (M,) V; `smooth` joins them by straight lines, else each is held."""
        value = np.asarray(voltage, dtype=float)
        rest = float(value[0])
        value = value - rest
        slope = np.zeros_like(value)
        if smooth:
            slope[:-1] = np.diff(value) / interval
        integral = np.zeros_like(value)
        np.cumsum((value[:-1] + slope[:-1] * interval / 2) * interval, out=integral[1:])
        return cls(start=start, interval=interval, value=value, slope=slope, integral=integral, rest=rest)

    @classmethod
    def through_smooth_samples(cls, voltage: Floats, *, start: float, interval: float, refine: int) -> Drive:
        """Cubic spline through the samples (M,), as straight lines between `refine` points per interval.

        Straight lines between the points of a sine of frequency f would lose (pi f interval / refine)^2 / 3 of its
        amplitude; the points are moved apart beforehand by what the lines lose (`_for_straight_lines`).
        """
        fine = np.asarray(voltage, dtype=float)
        if refine > 1:
            from scipy.interpolate import CubicSpline

            order = np.arange((len(voltage) - 1) * refine + 1) / refine
            fine = CubicSpline(np.arange(len(voltage)), voltage)(order)
        return cls.from_samples(
            _for_straight_lines(fine), start=start, interval=interval / refine, smooth=True
        )

    @property
    def stop(self) -> float:
        """Instant of the last sample, s."""
        return self.start + (len(self.value) - 1) * self.interval

    def locate(self, time: Floats) -> tuple[NDArray[np.intp], Floats]:
        """Index of the piece each instant falls in, and the time since that piece began."""
        position = (time - self.start) / self.interval
        # an instant meant to lie on a sample must not fall one rounding error before it
        index = np.clip(np.floor(position + 1e-9), 0, len(self.value) - 1).astype(np.intp)
        since = np.maximum(time - self.start - index * self.interval, 0.0)
        return index, since

    def integral_at(self, time: Floats) -> Floats:
        """Exact integral of the voltage (from rest) up to each instant, V s."""
        index, since = self.locate(time)
        inside = self.integral[index] + self.value[index] * since + self.slope[index] * since**2 / 2
        return np.where(time < self.start, 0.0, inside)

    def mean(self, end: Floats, width: float) -> Floats:
        """Mean voltage (from rest) over [end - width, end]; the value itself for width 0."""
        if width > 0:
            return (self.integral_at(end) - self.integral_at(end - width)) / width
        index, since = self.locate(end)
        return np.where(end < self.start, 0.0, self.value[index] + self.slope[index] * since)


def _for_straight_lines(points: Floats) -> Floats:
    """Points (M,) whose joining lines hold the given smooth signal: it divided by sinc^2, the transfer of the lines.

    (x / sin x)^2 = 1 + s / 3 + 8 s^2 / 45 + 4 s^3 / 35 + 128 s^4 / 1575 + ... with s = sin^2 x and x = pi f interval,
    and s is -1/4 of the second difference. Three terms miss by 4e-5 at eight points per period, 2e-7 at sixteen.
    """
    term, moved = points, points.copy()
    for ratio in (1 / 3, 8 / 15, 9 / 14):  # of successive coefficients
        bend = np.zeros_like(points)  # both ends stay where they are
        bend[1:-1] = 2 * term[1:-1] - term[:-2] - term[2:]
        term = ratio / 4 * bend
        moved += term
    return moved


def free_decay(wn: float, zeta: float, time: Floats) -> Floats:
    """Free motion from unit angle and from unit rate (rad/s times wn) at t = 0, shape (N, 2); zero before."""
    later = np.maximum(time, 0.0)
    cosine, sine = damped_waves(wn, zeta, later)
    columns = np.stack([cosine + zeta * wn * sine, wn * sine], axis=-1)
    columns[time < 0] = 0.0
    return columns


def free_decay_slopes(wn: float, zeta: float, time: Floats, start: tuple[float, float]) -> Floats:
    """Derivatives (N, 2) of `free_decay` times `start` by natural frequency (per Hz) and damping ratio; zero before."""
    later = np.maximum(time, 0.0)
    state = np.zeros((len(later), 4))
    state[:, 0], state[:, 1] = start[0], wn * start[1]
    q, speed = moved(wn, zeta, later, state)[:, 2:].T
    # the rate at the start is in units of wn, and q' alone does not know of it
    by_wn = 2 / wn * (speed + zeta * wn * q) - start[1] * damped_waves(wn, zeta, later)[1]
    columns = np.stack([2 * math.pi * by_wn, -2 * wn * q], axis=-1)
    columns[time < 0] = 0.0
    return columns


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MeanMotion:
    """Mean angle per unit gain over each exposure, and its derivatives by the exposure's end (1/s), the natural
    frequency (1/Hz) and the damping ratio, each (N,).
    """

    angle: Floats
    rate: Floats
    by_natural_frequency: Floats
    by_damping_ratio: Floats


class HeldResponse:
    """Unit-gain response of one second-order rig to one drive; build once, ask at many instants.

    Parameters: the drive, natural frequency in Hz, damping ratio. The delay is the caller's: ask at t - tau.
    """

    def __init__(self, drive: Drive, natural_frequency: float, damping_ratio: float) -> None:
        self._drive = drive
        self._wn = 2 * math.pi * natural_frequency
        self._zeta = damping_ratio
        self._sloping = bool(np.any(drive.slope))
        self._recursions: dict[int, BlockRecursion] = {}

    def _recursion(self, n: int) -> BlockRecursion:
        """States of angle and rate (n = 2), and of q and its rate (n = 4), at the drive's own instants."""
        if n not in self._recursions:
            d, slopes = self._drive, self._slope_state()
            step = transition_matrix(self._wn, self._zeta, d.interval)
            unit = np.array([1.0, 0.0, 0.0, 0.0])
            # what a piece adds: where its own motion ends, less what becomes of where it began
            gains = [unit - step @ unit, slopes + d.interval * unit - step @ slopes]
            inputs = [d.value, d.slope] if self._sloping else [d.value]
            self._recursions[n] = BlockRecursion(step[:n, :n], inputs, [g[:n] for g in gains[: len(inputs)]])
        return self._recursions[n]

    def _slope_state(self) -> Floats:
        """What angle, rate, q and its rate are, beside the voltage, in steady motion with a slope of 1 V/s."""
        return np.array([-2 * self._zeta / self._wn, 1.0, 1 / self._wn**2, 0.0])

    def _at(self, time: Floats, n: int = 2) -> Floats:
        """Angle and rate, with n = 4 also q and its rate, at each instant: (N, n)."""
        d = self._drive
        index, since = d.locate(time)
        steady = np.zeros((len(index), n))
        if self._sloping:
            steady += d.slope[index][:, None] * self._slope_state()[:n]
        steady[:, 0] += d.value[index]
        state = moved(self._wn, self._zeta, since, self._recursion(n).at(index) - steady) + steady
        if self._sloping:
            state[:, 0] += d.slope[index] * since
        state[time < d.start] = 0.0
        return state

    def at(self, time: Floats) -> Floats:
        """Angle per unit gain at each instant (N,), counted from rest."""
        return self._at(np.asarray(time, dtype=float))[:, 0]

    def rate_at(self, time: Floats) -> Floats:
        """Angular rate per unit gain at each instant (N,), 1/s."""
        return self._at(np.asarray(time, dtype=float))[:, 1]

    def mean_and_rate(self, end: Floats, exposure: float) -> tuple[Floats, Floats]:
        """Mean angle over [end - exposure, end] and its derivative by `end`, both (N,); exposure 0 is the angle
        itself.
        """
        mean, rate = self._means(np.asarray(end, dtype=float), exposure, 2)
        return mean[0], rate[0]

    def mean(self, end: Floats, exposure: float) -> Floats:
        """Mean angle over [end - exposure, end], (N,)."""
        return self.mean_and_rate(end, exposure)[0]

    def mean_motion(self, end: Floats, exposure: float) -> MeanMotion:
        """Mean angle over [end - exposure, end] with its derivatives, exact too."""
        wn, zeta = self._wn, self._zeta
        mean, rate = self._means(np.asarray(end, dtype=float), exposure, 4)
        return MeanMotion(
            angle=mean[0],
            rate=rate[0],
            by_natural_frequency=4 * math.pi / wn * (rate[1] + zeta * wn * mean[1]),
            by_damping_ratio=-2 * wn * mean[1],
        )

    def _means(self, end: Floats, exposure: float, n: int) -> tuple[list[Floats], list[Floats]]:
        """Means over each exposure, and their derivatives by its end, of the angle and, with n = 4, of q."""
        state1 = self._at(end, n)
        if exposure <= 0:
            return [state1[:, k] for k in range(0, n, 2)], [state1[:, k] for k in range(1, n, 2)]
        begin = end - exposure
        state0 = self._at(begin, n)
        d, wn, zeta = self._drive, self._wn, self._zeta
        driven = d.integral_at(end) - d.integral_at(begin)  # of the voltage; for q, of the rate
        means, rates = [], []
        for k in range(0, n, 2):
            angle, rate = state1[:, k] - state0[:, k], state1[:, k + 1] - state0[:, k + 1]
            inertia = (rate + 2 * zeta * wn * angle) / wn**2
            means.append((driven - inertia) / exposure)
            rates.append(angle / exposure)
            driven = angle / wn**2
        return means, rates
