"""What did the frequency test measure, and does the model run through it? Gain and phase against frequency.

Gain log-log with 95 % intervals, the model as a line with its band; beneath, as the gain they would be mistaken for,
the noise level and the nonlinear distortion where it stands clear of the noise; phase below. At the resonance,
enlarged: the box in which the step test puts the peak (95 % in frequency and in height) beside that of the frequency
test.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.identification import Identification
from freqid.report.envelope import thinned
from freqid.report.figure_style import LIGHT, MARK, Palette, dress, new_figure
from freqid.report.peak_box import draw_peaks, has_peak
from freqid.report.quantity_words import minus
from freqid.report.response_display import (
    ModelCurve,
    ShownDistortion,
    ShownResponse,
    model_curve,
    shown_distortion,
    shown_response,
)
from freqid.step_test.step_result import StepResult

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["draw_gain", "draw_phase", "gain_and_phase_figure"]

Floats = NDArray[np.float64]
_DISTORTION_MARKS = {"odd": ("^", "▲"), "even": ("v", "▼"), "any order": ("D", "◆"), "from several runs": ("s", "■")}
_MOST_BARS = 160  # lines with a bar of their own; more are drawn as a band


def gain_and_phase_figure(
    identification: Identification, *, step_result: StepResult | None = None, palette: Palette = LIGHT
) -> Figure:
    """Gain, phase and, where the model has a resonance, the peak enlarged."""
    peak = has_peak(identification.model)
    ratios = (1.5, 1.0, 0.9) if peak else (1.5, 1.0)
    figure, axes = new_figure(height=7.0 if peak else 5.0, rows=len(ratios), ratios=ratios, palette=palette)
    draw_gain(axes[0], identification, step_result=step_result, palette=palette)
    draw_phase(axes[1], identification, palette=palette)
    axes[0].tick_params(labelbottom=False, which="both")
    axes[0].set_xlabel("")
    if peak:
        draw_peaks(axes[2], identification, step_result=step_result, palette=palette)
    return figure


def draw_gain(
    axes: Axes, identification: Identification, *, step_result: StepResult | None = None, palette: Palette = LIGHT
) -> None:
    """Gain, noise level and model into `axes`; the step test's predicted peak as a diamond."""
    dress(axes, palette)
    lines = shown_response(identification.response, identification.model)
    curve = model_curve(identification.model, _band(lines))
    axes.set(xscale="log", yscale="log", ylabel=f"gain ({identification.model.angle_unit}/V)", xlabel="frequency (Hz)")
    _noise(axes, lines, palette)
    levels = shown_distortion(identification)
    _distortion(axes, levels, palette)
    _model(axes, curve.frequency, curve.gain, curve.gain_half, palette=palette)
    lower = np.minimum(lines.gain_half, 0.999 * lines.gain)  # an interval down to zero has no foot on this axis
    _measured(axes, lines.frequency, (lines.gain, lower, lines.gain_half), palette=palette)
    _limit_decades(axes, lines)
    frequency_ticks(axes, _band(lines))
    if step_result is not None:
        _predicted_peak(axes, step_result, palette)
    _direct_labels(axes, curve, lines, palette)
    _name_distortion(axes, levels, palette)


def draw_phase(axes: Axes, identification: Identification, *, palette: Palette = LIGHT) -> None:
    """Phase and model into `axes`, with the fitted lag taken out where the clock offset is unknown."""
    from matplotlib.ticker import MultipleLocator

    dress(axes, palette)
    model = identification.model
    lines = shown_response(identification.response, model)
    curve = model_curve(model, _band(lines))
    axes.set(xscale="log", xlabel="frequency (Hz)", ylabel="phase (°)")
    _model(axes, curve.frequency, curve.phase, curve.phase_half, palette=palette)
    _measured(axes, lines.frequency, (lines.phase, lines.phase_half, lines.phase_half), palette=palette)
    low, high = float(min(curve.phase.min(), lines.phase.min())), float(max(curve.phase.max(), lines.phase.max()))
    axes.set_ylim(low - 20, high + 20)
    axes.yaxis.set_major_locator(MultipleLocator(45 if high - low < 400 else 180))
    frequency_ticks(axes, _band(lines))
    if not model.clock.offset_known:
        axes.set_ylabel("phase, lag taken out (°)")
        lag = model.clock.lag
        value, expanded = lag.rounded()
        axes.text(0.99, 0.98, f"fitted lag of {minus(value)} ± {expanded} s\n(delay − clock offset) taken out",
                  transform=axes.transAxes, ha="right", va="top", color=palette.noise, fontsize=8.5)  # fmt: skip


def frequency_ticks(axes: Axes, band: tuple[float, float]) -> None:
    """Plain numbers at 1, 2, 5 on a logarithmic frequency axis, decades only where the band is wide."""
    from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

    axes.set_xlim(*band)
    steps = (1.0, 2.0, 5.0) if band[1] / band[0] < 300 else (1.0,)
    axes.xaxis.set_major_locator(LogLocator(subs=steps))
    axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axes.xaxis.set_minor_formatter(NullFormatter())


def _band(lines: ShownResponse) -> tuple[float, float]:
    """Frequency axis: the lines with a margin; a single line gets half an octave to either side."""
    low, high = float(lines.frequency[0]), float(lines.frequency[-1])
    return (low / 1.12, high * 1.12) if high > low else (low / 1.41, high * 1.41)


def _measured(axes: Axes, frequency: Floats, values: tuple[Floats, Floats, Floats], *, palette: Palette) -> None:
    value, lower, upper = values
    colour = palette.frequency_test
    if len(frequency) <= _MOST_BARS:
        axes.errorbar(frequency, value, yerr=[lower, upper], fmt=MARK["frequency_test"], markersize=3.2, color=colour,
                      elinewidth=0.9, capsize=0, markeredgewidth=0, zorder=3)  # fmt: skip
        return
    low, high = thinned(frequency, value - lower, points=600), thinned(frequency, value + upper, points=600)
    grid = thinned(frequency, value, points=600)
    bottom, top = np.interp(grid[0], *low), np.interp(grid[0], *high)
    axes.fill_between(grid[0], bottom, top, color=colour, alpha=0.28, linewidth=0, zorder=2)
    axes.plot(*grid, color=colour, linewidth=0, marker=".", markersize=2.2, zorder=3)


def _model(axes: Axes, frequency: Floats, value: Floats, half: Floats, *, palette: Palette) -> None:
    axes.fill_between(frequency, value - half, value + half, color=palette.model, alpha=0.2, linewidth=0, zorder=1)
    axes.plot(frequency, value, color=palette.model, linewidth=1.1, zorder=2)


def _noise(axes: Axes, lines: ShownResponse, palette: Palette) -> None:
    known = lines.noise_gain > 0
    x, y = thinned(lines.frequency[known], lines.noise_gain[known], points=600)
    axes.plot(x, y, color=palette.noise, linewidth=0.9, marker="." if len(x) < 2 else "")


def _distortion(axes: Axes, levels: tuple[ShownDistortion, ...], palette: Palette) -> None:
    for level in levels:
        axes.plot(level.frequency, level.gain, marker=_DISTORTION_MARKS[level.kind][0], color=palette.distortion,
                  markersize=3.4, linewidth=0, markeredgewidth=0, zorder=3)  # fmt: skip


def _name_distortion(axes: Axes, levels: tuple[ShownDistortion, ...], palette: Palette) -> None:
    """Which mark is which order, once, above the axes."""
    if levels:
        words = "   ".join(f"{_DISTORTION_MARKS[level.kind][1]} {level.kind}" for level in levels)
        axes.set_title(f"distortion, as gain:  {words}", loc="right", color=palette.distortion, fontsize=8.5)


def _limit_decades(axes: Axes, lines: ShownResponse) -> None:
    """At most two decades beneath the smallest gain: noise far below needs no room."""
    from matplotlib.ticker import FuncFormatter, NullFormatter

    floor = float(np.min(lines.gain)) / 100
    noise = lines.noise_gain[lines.noise_gain > 0]
    lowest = min(float(np.min(noise)) if len(noise) else np.inf, float(np.min(lines.gain)))
    axes.set_ylim(max(lowest / 1.6, floor), float(np.max(lines.gain + lines.gain_half)) * 1.7)
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axes.yaxis.set_minor_formatter(NullFormatter())


def _predicted_peak(axes: Axes, step_result: StepResult, palette: Palette) -> None:
    derived = step_result.derived
    frequency, gain = derived.get("resonance_frequency"), derived.get("resonance_gain")
    if frequency is None or gain is None or frequency.value <= 0:
        return
    axes.plot([frequency.value], [gain.value], marker=MARK["step_test"], markersize=7, markerfacecolor="none",
              markeredgecolor=palette.step_test, markeredgewidth=1.4, zorder=4)  # fmt: skip
    left, right = axes.get_xlim()
    side = -1 if frequency.value**2 > left * right * 2 else 1  # words go where there is room
    axes.annotate("peak the step test predicts", (frequency.value, gain.value), xytext=(9 * side, 4),
                  textcoords="offset points", ha="left" if side > 0 else "right", color=palette.step_test,
                  fontsize=8.5)  # fmt: skip


def _direct_labels(axes: Axes, curve: ModelCurve, lines: ShownResponse, palette: Palette) -> None:
    left = curve.frequency[0]
    reach: Sequence[tuple[str, str, float, int]] = [
        ("● measured, 95 %", palette.frequency_test, float(curve.gain[0]), 16),
        ("— model, 95 %", palette.model, float(curve.gain[0]), 5),
    ]
    known = lines.noise_gain[lines.noise_gain > 0]
    if len(known):
        reach = [*reach, ("noise, as gain", palette.noise, float(np.max(known[: max(len(known) // 4, 1)])), 4)]
    for text, colour, height, up in reach:
        axes.annotate(text, (left, height), xytext=(6, up), textcoords="offset points", color=colour, fontsize=8.5)
