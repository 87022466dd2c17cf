"""What does the rig do between the samples? Its exact angle at any instant, for a held voltage.

The voltage is piecewise linear on a uniform grid: a staircase (zero-order hold, slope 0) or straight
lines between samples of a smooth signal. Within each piece the second-order equation

    theta'' + 2 zeta wn theta' + wn^2 theta = wn^2 u(t)            (gain 1)

has the particular solution theta_p = u + s (t - 2 zeta / wn) for slope s, and what deviates from it decays as
exp(A t) with the closed 2 x 2 matrix exponential. So there is no time-stepping error; rounding is the
only error (about 1e-16 / (wn dt)^2 of the swing). Exposure averages use the integral of the same equation:

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

__all__ = ["Drive", "HeldResponse", "free_decay"]

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

        For a sine of frequency f the straight lines miss by (pi f interval / refine)^2 / 2 of its amplitude at most.
        """
        from scipy.interpolate import CubicSpline

        order = np.arange(len(voltage))
        fine = np.arange((len(voltage) - 1) * refine + 1) / refine
        return cls.from_samples(
            CubicSpline(order, voltage)(fine), start=start, interval=interval / refine, smooth=True
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


def _transition(wn: float, zeta: float, time: Floats) -> tuple[Floats, Floats]:
    """c and s with exp(A t) = [[c + zeta wn s, s], [-wn^2 s, c - zeta wn s]]."""
    decay = np.exp(-zeta * wn * time)
    if zeta < 1:
        wd = wn * math.sqrt((1 - zeta) * (1 + zeta))
        argument = wd * time
        return decay * np.cos(argument), decay * time * np.sinc(argument / np.pi)
    alpha = wn * math.sqrt((zeta - 1) * (zeta + 1))
    argument = alpha * time
    if alpha == 0:
        return decay, decay * time
    fast = np.exp(-(zeta * wn + alpha) * time)
    slow = np.exp(-wn**2 / (zeta * wn + alpha) * time)  # (zeta wn - alpha), without cancellation
    sinh_over = np.where(argument < 1e-4, time * (1 + argument**2 / 6) * decay, (slow - fast) / (2 * alpha))
    return (slow + fast) / 2, sinh_over


def free_decay(wn: float, zeta: float, time: Floats) -> Floats:
    """Free motion from unit angle and from unit rate (rad/s times wn) at t = 0, shape (N, 2); zero before."""
    later = np.maximum(time, 0.0)
    c, s = _transition(wn, zeta, later)
    columns = np.stack([c + zeta * wn * s, wn * s], axis=-1)
    columns[time < 0] = 0.0
    return columns


class HeldResponse:
    """Unit-gain response of one second-order rig to one drive; build once, ask at many instants.

    Parameters: the drive, natural frequency in Hz, damping ratio. The delay is the caller's: ask at t - tau.
    """

    def __init__(self, drive: Drive, natural_frequency: float, damping_ratio: float) -> None:
        self._drive = drive
        self._wn = 2 * math.pi * natural_frequency
        self._zeta = damping_ratio
        self._angle, self._rate = self._states()

    def _states(self) -> tuple[Floats, Floats]:
        """Angle and rate at the drive's own instants, by the second-order recursion both components obey."""
        from scipy.signal import lfilter

        d, wn, zeta = self._drive, self._wn, self._zeta
        c, s = (float(v) for v in _transition(wn, zeta, np.asarray(d.interval)))
        p11, p12, p21, p22 = c + zeta * wn * s, s, -(wn**2) * s, c - zeta * wn * s
        offset = 2 * zeta / wn
        begin_angle, begin_rate = d.value - d.slope * offset, d.slope
        end_angle = begin_angle + d.slope * d.interval
        force_angle = end_angle - (p11 * begin_angle + p12 * begin_rate)
        force_rate = begin_rate - (p21 * begin_angle + p22 * begin_rate)
        denominator = [1.0, -(p11 + p22), p11 * p22 - p12 * p21]

        def recursion(own: Floats, other: Floats, cross: float, diagonal_other: float) -> Floats:
            # x[m+2] = tr x[m+1] - det x[m] + own[m+1] - p_other own[m] + cross other[m]
            drive = np.zeros(len(own))
            drive[1:] = own[:-1]
            drive[2:] += cross * other[:-2] - diagonal_other * own[:-2]
            return np.asarray(lfilter([1.0], denominator, drive))

        return (
            recursion(force_angle, force_rate, p12, p22),
            recursion(force_rate, force_angle, p21, p11),
        )

    def _at(self, time: Floats) -> tuple[Floats, Floats]:
        d, wn, zeta = self._drive, self._wn, self._zeta
        index, since = d.locate(time)
        c, s = _transition(wn, zeta, since)
        slope, offset = d.slope[index], 2 * zeta / wn
        begin = d.value[index] - slope * offset
        angle0, rate0 = self._angle[index] - begin, self._rate[index] - slope
        angle = (c + zeta * wn * s) * angle0 + s * rate0 + begin + slope * since
        rate = -(wn**2) * s * angle0 + (c - zeta * wn * s) * rate0 + slope
        before = time < d.start
        angle[before], rate[before] = 0.0, 0.0
        return angle, rate

    def at(self, time: Floats) -> Floats:
        """Angle per unit gain at each instant (N,), counted from rest."""
        return self._at(np.asarray(time, dtype=float))[0]

    def rate_at(self, time: Floats) -> Floats:
        """Angular rate per unit gain at each instant (N,), 1/s."""
        return self._at(np.asarray(time, dtype=float))[1]

    def mean_and_rate(self, end: Floats, exposure: float) -> tuple[Floats, Floats]:
        """Mean angle over [end - exposure, end] and its derivative by `end`, both (N,); exposure 0 is the angle
        itself.
        """
        end = np.asarray(end, dtype=float)
        angle1, rate1 = self._at(end)
        if exposure <= 0:
            return angle1, rate1
        begin = end - exposure
        angle0, rate0 = self._at(begin)
        d, wn, zeta = self._drive, self._wn, self._zeta
        voltage = d.integral_at(end) - d.integral_at(begin)
        inertia = (rate1 - rate0) / wn**2 + 2 * zeta / wn * (angle1 - angle0)
        return (voltage - inertia) / exposure, (angle1 - angle0) / exposure

    def mean(self, end: Floats, exposure: float) -> Floats:
        """Mean angle over [end - exposure, end], (N,)."""
        return self.mean_and_rate(end, exposure)[0]
