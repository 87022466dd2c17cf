"""What can be read off one step? Overshoot, times and decrement from the smoothed curve, each with its uncertainty.

Common practice for the definitions: percent overshoot and times refer to the change between the settled levels; delay
time is
50 %, rise times run from the onset or 10 % to 90 %, settling time is the last exit from ± 5 % or ± 2 %. Times count
from the onset
(step plus delay). A reading that the noise or the frame rate does not allow is None.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.quantity import Quantity
from freqid.step_test.envelope import Extremes
from freqid.step_test.smooth_curve import SmoothCurve

__all__ = ["StepFrames", "read_extremes", "read_step"]

Floats = NDArray[np.float64]

POINTS_PER_PERIOD = 100  # of the smoothed curve
BAND_OVER_NOISE = 4.0  # a hold has some fifty independent points: their largest stays below this many deviations
CLEAR = 4.0  # an extreme counts while it stands this many standard uncertainties above the settled level


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepFrames:
    """Frames of one hold (`time` from the onset, s), its settled levels with their standard uncertainties, the change
    of voltage.

    `period` is the oscillation's period, or the time constant's equivalent for an overdamped rig. `settled` is false
    where a level is that of the fitted model, because the hold ended too soon; then there is no static gain to read.
    """

    time: Floats
    angle: Floats
    before: tuple[float, float]
    after: tuple[float, float]
    voltage_change: float
    noise: float
    period: float
    angle_unit: str
    settled: bool = True


def read_step(frames: StepFrames, *, half_width: float) -> dict[str, Quantity | None]:
    """Everything that can be read off one step; None where it cannot."""
    trace = _trace(frames, half_width)
    gain_uncertainty = float(np.hypot(frames.before[1], frames.after[1]) / abs(frames.voltage_change))
    readings: dict[str, Quantity | None] = dict(trace.crossings())
    readings.update(trace.settling())
    readings.update(trace.extremes(frames.period))
    readings["static_gain"] = None if not frames.settled else Quantity.normal(
        (frames.after[0] - frames.before[0]) / frames.voltage_change, f"{frames.angle_unit}/V", gain_uncertainty
    )
    return readings


def read_extremes(frames: StepFrames, *, half_width: float) -> Extremes:
    """Every peak and trough that stands clear of the noise, in angle units; none for a sluggish rig."""
    trace, change = _trace(frames, half_width), frames.after[0] - frames.before[0]
    clear = np.array(trace.clear_extremes(), dtype=int)
    return Extremes(
        time=trace.time[clear],
        deviation=(trace.level[clear] - 1) * change,
        uncertainty=np.hypot(trace.noise[clear], trace.ends) * abs(change),
    )


def _trace(frames: StepFrames, half_width: float) -> _Trace:
    curve = SmoothCurve(time=frames.time, angle=frames.angle, half_width=half_width, noise=frames.noise)
    grid = np.arange(0.0, frames.time[-1], frames.period / POINTS_PER_PERIOD)
    grid = grid[grid > 0]
    value, slope, spread = curve.at(grid)
    change = frames.after[0] - frames.before[0]
    level = (value - frames.before[0]) / change
    noise = spread / abs(change)
    ends = float(np.hypot(frames.before[1], frames.after[1]) / abs(change))
    return _Trace(time=grid, level=level, slope=slope / change, noise=noise, ends=ends)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Trace:
    """The smoothed step from 0 (before) to 1 (after) on a fine grid, with slope (1/s) and standard uncertainties."""

    time: Floats
    level: Floats
    slope: Floats
    noise: Floats
    ends: float

    def _crossing(self, fraction: float) -> tuple[float, float]:
        above = np.flatnonzero(self.level >= fraction)
        if len(above) == 0 or not np.isfinite(self.level[: above[0]]).any():
            return np.nan, np.nan
        j = above[0]
        if j == 0 or not np.isfinite(self.level[j - 1]):
            return np.nan, np.nan
        share = (fraction - self.level[j - 1]) / (self.level[j] - self.level[j - 1])
        when = self.time[j - 1] + share * (self.time[j] - self.time[j - 1])
        steepness = max(abs(self.slope[j]), 1e-12)
        return float(when), float(np.hypot(self.noise[j], self.ends) / steepness)

    def crossings(self) -> dict[str, Quantity | None]:
        """Delay time and rise times; the two crossings of 10-90 % lie apart, so their noise is independent."""
        (t10, u10), (t50, u50), (t90, u90) = (self._crossing(f) for f in (0.1, 0.5, 0.9))
        return {
            "delay_time_50": Quantity.finite_or_none(t50, "s", u50),
            "rise_time_0_90": Quantity.finite_or_none(t90, "s", u90),
            "rise_time_10_90": Quantity.finite_or_none(t90 - t10, "s", float(np.hypot(u10, u90))),
        }

    def settling(self) -> dict[str, Quantity | None]:
        """Last exit from ± 5 % and ± 2 %, where the band is wider than the noise of the curve."""
        found: dict[str, Quantity | None] = {}
        for name, band in (("settling_time_5", 0.05), ("settling_time_2", 0.02)):
            found[name] = None
            good = np.isfinite(self.level)
            if not good.any() or BAND_OVER_NOISE * np.hypot(np.nanmedian(self.noise), self.ends) > band:
                continue
            noise = float(np.hypot(np.nanmedian(self.noise), self.ends))
            # an extreme that grazes the band makes the time jump: the noise moves the band's edge
            times = [self._last_exit(good, band + shift * noise) for shift in (0.0, 1.96, -1.96)]
            if any(t is None for t in times):
                continue
            last, early, late = (float(t) for t in times if t is not None)
            low, high = min(last, early, late), max(last, early, late)
            found[name] = Quantity(
                value=last, unit="s", standard_uncertainty=max((high - low) / 3.92, 1e-9), interval_95=(low, high)
            )
        return found

    def _last_exit(self, good: NDArray[np.bool_], band: float) -> float | None:
        outside = np.flatnonzero(good & (np.abs(self.level - 1) > band))
        if len(outside) == 0 or outside[-1] + 1 >= len(self.level):
            return None
        return float(self.time[outside[-1] + 1])

    def clear_extremes(self) -> list[int]:
        """Places of the peaks and troughs about the settled level, as long as they stand clear of the noise."""
        deviation = self.level - 1
        turning = np.flatnonzero(np.diff(np.sign(self.slope)) != 0) + 1
        first = self._crossing(0.9)[0]
        turning = turning[self.time[turning] > first] if np.isfinite(first) else turning[:0]
        clear: list[int] = []
        for j in turning:
            wanted = 1.0 if len(clear) % 2 == 0 else -1.0
            u = np.hypot(self.noise[j], self.ends)
            if not (np.isfinite(deviation[j]) and wanted * deviation[j] > CLEAR * u):
                break
            clear.append(int(j))
        return clear

    def extremes(self, period: float) -> dict[str, Quantity | None]:
        """Overshoot, peak time, decrement and time constant from the peaks and troughs about the settled level."""
        none = dict.fromkeys(("percent_overshoot", "peak_time", "log_decrement", "time_constant"))
        deviation = self.level - 1
        clear = self.clear_extremes()
        if not clear:
            none["percent_overshoot"] = self._no_overshoot()
            return none
        peak = clear[0]
        u_peak = float(np.hypot(self.noise[peak], self.ends))
        height = float(deviation[peak])
        curvature = height * (2 * np.pi / period) ** 2
        # variance of the slope of a local parabola is about 3 s^2/(n w^2), of its height 2.25 s^2/n (w: half width)
        u_slope = self.noise[peak] * np.sqrt(3 / 2.25) / (0.15 * period)
        none["percent_overshoot"] = Quantity.normal(100 * height, "%", 100 * u_peak)
        none["peak_time"] = Quantity.normal(float(self.time[peak]), "s", float(u_slope / curvature))
        none.update(self._decay(np.array(clear), deviation))
        return none

    def _no_overshoot(self) -> Quantity | None:
        """Nothing stands clear of the settled level: none, up to what the noise could hide."""
        hidden = 100 * float(np.hypot(np.nanmedian(self.noise), self.ends)) if np.isfinite(self.noise).any() else np.nan
        if not np.isfinite(hidden):
            return None
        most = (CLEAR + 2) * hidden  # an extreme just not clear, and its noise
        return Quantity(value=0.0, unit="%", standard_uncertainty=most / 2, interval_95=(0.0, most))

    def _decay(self, clear: Floats, deviation: Floats) -> dict[str, Quantity | None]:
        """Straight line through ln|extreme| against its number and its time, weighted with its uncertainty."""
        index = clear.astype(int)
        if len(index) < 2:
            return {"log_decrement": None, "time_constant": None}
        size = np.abs(deviation[index])
        weight = size / np.hypot(self.noise[index], self.ends)
        per_half, u_half = _slope(np.arange(len(index), dtype=float), np.log(size), weight)
        rate, u_rate = _slope(self.time[index], np.log(size), weight)
        constant = -1 / rate if rate < 0 else np.nan
        return {
            "log_decrement": Quantity.finite_or_none(-2 * per_half, "1", 2 * u_half),
            "time_constant": Quantity.finite_or_none(constant, "s", u_rate * constant**2),
        }


def _slope(x: Floats, y: Floats, weight: Floats) -> tuple[float, float]:
    """Slope of the weighted straight line and its standard uncertainty."""
    w2 = weight**2
    centre = np.sum(w2 * x) / np.sum(w2)
    spread = np.sum(w2 * (x - centre) ** 2)
    return float(np.sum(w2 * (x - centre) * y) / spread), float(1 / np.sqrt(spread))
