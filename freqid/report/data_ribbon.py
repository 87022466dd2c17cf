"""What happened while the run was recorded? One thin row per kind of fault, against time; quiet when all is well.

Rows: gaps in the stamps with the frames lost, frames without a readable angle, repeated stamps, readings far from the
model (beyond 5 robust standard deviations), readings that stick to an extreme (clipped); then the deviation of the
stamps from a uniform clock in ms, and what the model leaves of the angle, with its rms in each period of the
excitation. Time is that of the angle's own stamps.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.frame_grid import FrameGrid
from freqid.estimate.identification import Identification
from freqid.records import Run
from freqid.report.envelope import thinned
from freqid.report.figure_style import LIGHT, Palette, dress, new_figure

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["Ribbon", "draw_clock_residual", "draw_events", "draw_remainder", "ribbon_figure", "ribbon_of"]

Floats = NDArray[np.float64]

_OUTLIER = 5.0  # robust standard deviations (1.4826 times the median absolute deviation)
_CLIPPED_IN_A_ROW = 3  # readings at the very same extreme


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Ribbon:
    """Instants of every fault by name (s, the angle's stamps), and the two residuals.

    `clock` (N,) ms at `stamp` (N,): stamp minus the uniform clock that fits best; `remainder` (M,) angle units at
    `remainder_time` (M,) s; `period_edge`, `period_rms`: edges (P + 1,) of the whole
    periods and the rms of the remainder in each.
    """

    events: dict[str, Floats]
    lost_frames: int
    stamp: Floats
    clock: Floats
    remainder_time: Floats
    remainder: Floats
    period_edge: Floats
    period_rms: Floats
    angle_unit: str


def ribbon_of(run: Run, identification: Identification) -> Ribbon:
    """Gather the rows of the ribbon from the raw run and what was left over by the fit."""
    stamps, angle = run.angle.time, run.angle.angle
    timed = np.isfinite(stamps)
    stamp = stamps[timed]
    grid = FrameGrid.from_stamps(stamp)
    uniform = np.polynomial.Polynomial.fit(grid.slot, stamp, 1)
    residual = identification.residual
    # the residual's time is on the input's clock: put it back on the stamps by the clock map
    clock = identification.model.clock
    ratio = 1 + clock.ratio_ppm.value * 1e-6
    lag = 0.0 if clock.offset_known else clock.lag.value
    time = (identification.time + lag) / ratio
    edges, rms = _by_period(run, identification.time, residual)
    return Ribbon(
        events={
            "gap, frames lost": stamp[grid.before_gaps],
            "unreadable": stamps[timed & ~np.isfinite(angle)],
            "repeated stamp": stamp[1:][np.diff(stamp) == 0],
            "far from model": time[_outlying(residual)],
            "clipped": stamps[timed][_sticking(angle[timed])],
        },
        lost_frames=grid.lost,
        stamp=stamp,
        clock=1e3 * (stamp - uniform(grid.slot)),
        remainder_time=time,
        remainder=residual,
        period_edge=(edges + lag) / ratio,
        period_rms=rms,
        angle_unit=run.angle.angle_unit,
    )


def ribbon_figure(run: Run, identification: Identification, *, palette: Palette = LIGHT) -> Figure:
    """The data ribbon as a figure of its own."""
    ribbon = ribbon_of(run, identification)
    figure, axes = new_figure(height=4.0, rows=3, ratios=(1.25, 1.0, 1.2), palette=palette)
    draw_events(axes[0], ribbon, palette=palette)
    draw_clock_residual(axes[1], ribbon, palette=palette)
    draw_remainder(axes[2], ribbon, palette=palette)
    for one in axes:
        one.set_xlim(float(ribbon.stamp[0]), float(ribbon.stamp[-1]))
    for one in axes[:2]:
        one.tick_params(labelbottom=False)
        one.set_xlabel("")
    return figure


def draw_events(axes: Axes, ribbon: Ribbon, *, palette: Palette = LIGHT) -> None:
    """One row per kind of fault; its count, or "none" in grey, at the end of the row."""
    dress(axes, palette)
    names = list(ribbon.events)
    axes.set(ylim=(len(names) - 0.4, -0.6), xlabel="time of the angle log (s)")
    axes.set_yticks(range(len(names)), names)
    axes.tick_params(axis="y", length=0)
    axes.spines["left"].set_visible(False)
    for row, times in enumerate(ribbon.events.values()):
        axes.axhline(row, color=palette.faint, linewidth=0.7, zorder=0)
        shown = thinned(times, np.zeros(len(times)), points=800)[0]
        axes.plot(shown, np.full(len(shown), row), "|", color=palette.limit, markersize=7, markeredgewidth=1.0)
        lost = f" ({ribbon.lost_frames})" if row == 0 and ribbon.lost_frames else ""
        axes.annotate(f"{len(times)}{lost}" if len(times) else "none", (1, row), xycoords=axes.get_yaxis_transform(),
                      xytext=(4, 0), textcoords="offset points", va="center", annotation_clip=False, fontsize=8.5,
                      color=palette.model if len(times) else palette.noise)  # fmt: skip


def draw_clock_residual(axes: Axes, ribbon: Ribbon, *, palette: Palette = LIGHT) -> None:
    """Stamps minus the uniform clock that fits them best, in ms."""
    dress(axes, palette)
    axes.plot(*thinned(ribbon.stamp, ribbon.clock), color=palette.noise, linewidth=0.7)
    axes.set(ylabel="clock\n(ms)", xlabel="time of the angle log (s)")
    if np.ptp(ribbon.clock) < 1e-3:  # a microsecond: nothing but rounding is left to see
        axes.set_ylim(-1, 1)


def draw_remainder(axes: Axes, ribbon: Ribbon, *, palette: Palette = LIGHT) -> None:
    """Measured minus model in time, and its rms in each period as a step line."""
    dress(axes, palette)
    axes.plot(*thinned(ribbon.remainder_time, ribbon.remainder), color=palette.noise, linewidth=0.5)
    axes.set(ylabel=f"left over\n({ribbon.angle_unit})", xlabel="time of the angle log (s)")
    if len(ribbon.period_rms):
        axes.stairs(ribbon.period_rms, ribbon.period_edge, baseline=None, color=palette.frequency_test, linewidth=1.6)
        axes.annotate("rms per\nperiod", (1, float(ribbon.period_rms[-1])), xycoords=axes.get_yaxis_transform(),
                      xytext=(4, 0), textcoords="offset points", va="center", annotation_clip=False, fontsize=8.5,
                      color=palette.frequency_test)  # fmt: skip


def _by_period(run: Run, time: Floats, residual: Floats) -> tuple[Floats, Floats]:
    """Edges of the whole periods (input's clock) and the rms in each; both empty where the voltage does not repeat."""
    periodicity = run.input.periodicity
    if periodicity is None or periodicity.n_periods < 1:
        return np.empty(0), np.empty(0)
    edges = periodicity.start + periodicity.period * np.arange(periodicity.n_periods + 1)
    place = np.searchsorted(edges, time, side="right") - 1
    parts = [residual[place == number] for number in range(periodicity.n_periods)]
    if any(len(part) == 0 for part in parts):
        return np.empty(0), np.empty(0)
    return np.asarray(edges, dtype=float), np.array([float(np.sqrt(np.mean(part**2))) for part in parts])


def _outlying(residual: Floats) -> NDArray[np.bool_]:
    spread = 1.4826 * float(np.median(np.abs(residual - np.median(residual)))) if len(residual) else 0.0
    return np.abs(residual - np.median(residual)) > _OUTLIER * spread if spread > 0 else np.zeros(len(residual), bool)


def _sticking(angle: Floats) -> NDArray[np.bool_]:
    """Readings of the very largest or smallest value that stand in a row of at least three."""
    found = np.zeros(len(angle), bool)
    if np.count_nonzero(np.isfinite(angle)) == 0 or np.nanmax(angle) == np.nanmin(angle):
        return found
    for extreme in (np.nanmax(angle), np.nanmin(angle)):
        at = np.concatenate([[0], (angle == extreme).astype(int), [0]])
        begins, ends = np.flatnonzero(np.diff(at) == 1), np.flatnonzero(np.diff(at) == -1)
        for begin, end in zip(begins, ends, strict=True):
            found[begin:end] = end - begin >= _CLIPPED_IN_A_ROW
    return found
