"""Does the frequency-response model foretell the measured step?

The samples of the step run against the band that the frequency test's model predicts (95 %, of the motion itself; the
wide grey band adds the noise of one reading), one panel per direction. The levels of 50 %, 90 %, ±5 % and ±2 % are
marked where the step test read them; end stops are hatched where the motion comes near. Beneath: measured minus
predicted.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.identification import Identification
from freqid.quantity import Quantity, coverage_factor
from freqid.records import Run
from freqid.report.envelope import thinned
from freqid.report.figure_style import LIGHT, MARK, Palette, dress, new_figure
from freqid.report.step_display import StepView, chosen_steps, curve_times, predicted_step, step_view
from freqid.step_test.step_result import StepResult

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["draw_step", "draw_step_difference", "step_figure_of"]

Floats = NDArray[np.float64]

_MOST_MARKS = 500  # samples of one step drawn each by itself
_STRETCHES = 40
_WORDS = 0.22  # of the height of the motion
_NEAR_STOP = 0.6  # of the way to a stop: from here on it is drawn


def step_figure_of(
    run: Run,
    result: StepResult,
    *,
    identification: Identification | None = None,
    stops: float | None = None,
    palette: Palette = LIGHT,
) -> Figure:
    """The clearest step up and down, each with measured minus predicted beneath where there is a model to predict.

    `stops` is the angle of the end stops from the operating point; None draws none.
    """
    views = [step_view(run, result, reading) for reading in chosen_steps(result)]
    if identification is None:
        figure, axes = new_figure(height=2.7 * max(len(views), 1), rows=max(len(views), 1), palette=palette)
        for one, view in zip(axes, views, strict=False):
            draw_step(one, view, result, stops=stops, palette=palette)
        return figure
    figure, axes = new_figure(
        height=3.7 * max(len(views), 1), rows=2 * len(views), ratios=(2.6, 1.0) * len(views), palette=palette
    )
    for upper, lower, view in zip(axes[::2], axes[1::2], views, strict=True):
        draw_step(upper, view, result, identification=identification, stops=stops, palette=palette)
        draw_step_difference(lower, view, result, identification, palette=palette)
        upper.tick_params(labelbottom=False)
        upper.set_xlabel("")
    return figure


def draw_step(
    axes: Axes,
    view: StepView,
    result: StepResult,
    *,
    identification: Identification | None = None,
    stops: float | None = None,
    palette: Palette = LIGHT,
) -> None:
    """One step into `axes`."""
    dress(axes, palette)
    _levels(axes, view, palette)
    if identification is not None:
        _prediction(axes, view, result, identification, palette)
    many = _samples(axes, view.time, view.angle, palette)
    _readings(axes, view, palette)
    axes.set(xlim=view.span, xlabel="time from the onset of the response (s)", ylabel=f"angle ({view.angle_unit})")
    _room(axes, view)
    if stops is not None:
        _stops(axes, view, stops, palette)
    reading = view.reading
    title = f"step {reading.direction}, {reading.voltage_before:.3g} to {reading.voltage_after:.3g} V"
    axes.set_title(title.replace("-", "−"), loc="left", fontsize=9.5, color=palette.model)
    words = [("— measured, from least to most" if many else "◆ measured", palette.step_test)]
    if identification is not None:
        words.append(("— predicted by the frequency test, 95 %", palette.model))
        words.append(("and with the noise of one reading", palette.noise))
    _words(axes, view, words)


def draw_step_difference(
    axes: Axes, view: StepView, result: StepResult, identification: Identification, *, palette: Palette = LIGHT
) -> None:
    """Measured minus predicted into `axes`, with the same two bands."""
    dress(axes, palette)
    times = curve_times(view)
    band = predicted_step(view, identification, result, times).half
    whole = np.hypot(band, _reading_half(identification))
    axes.fill_between(times, -whole, whole, color=palette.noise, alpha=0.25, linewidth=0)
    axes.fill_between(times, -band, band, color=palette.frequency_test, alpha=0.5, linewidth=0)
    axes.axhline(0, color=palette.model, linewidth=0.8)
    left = view.angle - predicted_step(view, identification, result, view.time).angle
    if _samples(axes, view.time, left, palette):
        _means(axes, view.time, left, palette)
    axes.set(xlim=view.span, xlabel="time from the onset of the response (s)",
             ylabel=f"measured −\npredicted ({view.angle_unit})")  # fmt: skip


def _samples(axes: Axes, time: Floats, values: Floats, palette: Palette) -> bool:
    """Every sample as a mark; too many to be told apart as a line from least to most, and then True."""
    if len(time) <= _MOST_MARKS:
        axes.plot(time, values, MARK["step_test"], color=palette.step_test, markersize=2.6, markeredgewidth=0, zorder=3)
        return False
    axes.plot(*thinned(time, values), color=palette.step_test, linewidth=0.8, alpha=0.7, zorder=3)
    return True


def _means(axes: Axes, time: Floats, values: Floats, palette: Palette) -> None:
    """Means of equal stretches with their 95 % intervals: what is systematic shows where single samples hide it."""
    times, parts = np.array_split(time, _STRETCHES), np.array_split(values, _STRETCHES)
    centre, mean = np.array([part.mean() for part in times]), np.array([part.mean() for part in parts])
    half = coverage_factor() * np.array([part.std(ddof=1) / np.sqrt(len(part)) for part in parts])
    axes.errorbar(centre, mean, yerr=half, fmt=MARK["step_test"], color=palette.model, markersize=3.2, elinewidth=0.8,
                  markerfacecolor=palette.step_test, markeredgewidth=0.6, zorder=4)  # fmt: skip
    axes.annotate(f"◇ means of {len(time) // _STRETCHES}", (1, 1), xycoords="axes fraction", xytext=(-2, 1), fontsize=8,
                  textcoords="offset points", ha="right", va="bottom", color=palette.model)  # fmt: skip


def _prediction(
    axes: Axes, view: StepView, result: StepResult, identification: Identification, palette: Palette
) -> None:
    predicted = predicted_step(view, identification, result, curve_times(view))
    whole = np.hypot(predicted.half, _reading_half(identification))
    for half, colour, alpha in ((whole, palette.noise, 0.25), (predicted.half, palette.frequency_test, 0.5)):
        axes.fill_between(predicted.time, predicted.angle - half, predicted.angle + half, color=colour, alpha=alpha,
                          linewidth=0)  # fmt: skip
    axes.plot(predicted.time, predicted.angle, color=palette.model, linewidth=1.0, zorder=2)


def _reading_half(identification: Identification) -> float:
    """Half the 95 % interval of the noise of one reading, from what the frequency test left unexplained."""
    return coverage_factor() * float(np.std(identification.residual)) if len(identification.residual) else 0.0


def _levels(axes: Axes, view: StepView, palette: Palette) -> None:
    size = view.final - view.start
    for share, style in ((0.02, (0, (1, 1.5))), (0.05, (0, (4, 2)))):
        for side in (-1, 1):
            axes.axhline(view.final + side * share * size, color=palette.noise, linewidth=0.7, linestyle=style)
    at = view.span[1]
    for share, text in ((0.05, "+5 %"), (-0.05, "−5 %")):
        up = share * size > 0
        axes.annotate(text, (at, view.final + share * size), xytext=(-2, 2 if up else -2), textcoords="offset points",
                      ha="right", va="bottom" if up else "top", color=palette.noise, fontsize=7.5)  # fmt: skip


def _readings(axes: Axes, view: StepView, palette: Palette) -> None:
    """Where the step test read its times: a stroke at the level and the time, with its interval as a bar."""
    size, read = view.final - view.start, view.reading.quantities
    for name, share, text in (("delay_time_50", 0.5, "50 %"), ("rise_time_0_90", 0.9, "90 %")):
        _mark(axes, read.get(name), view.start + share * size, text, palette)
    for name, share, text, side in (
        ("settling_time_5", 0.05, "within ±5 %", "right"), ("settling_time_2", 0.02, "within ±2 %", "left"),
    ):  # fmt: skip
        time = read.get(name)
        if time is not None and time.value <= view.span[1]:
            base = view.final - 0.22 * size
            axes.plot([time.value] * 2, [base, view.final + share * size], color=palette.step_test, linewidth=0.9)
            axes.plot(time.interval_95, [base, base], color=palette.step_test, linewidth=2.2, solid_capstyle="butt")
            axes.annotate(text, (time.value, base), xytext=(3 if side == "right" else -3, -3 if size > 0 else 3),
                          textcoords="offset points", ha=side, va="top" if size > 0 else "bottom",
                          color=palette.step_test, fontsize=8)  # fmt: skip


def _mark(axes: Axes, time: Quantity | None, level: float, text: str, palette: Palette) -> None:
    if time is None:
        return
    axes.plot(time.interval_95, [level, level], color=palette.step_test, linewidth=2.2, zorder=4)
    axes.plot([time.value], [level], marker="+", markersize=9, markeredgewidth=1.3, color=palette.step_test, zorder=4)
    axes.annotate(text, (time.value, level), xytext=(-7, 0), textcoords="offset points", ha="right", va="center",
                  color=palette.step_test, fontsize=8.5)  # fmt: skip


def _room(axes: Axes, view: StepView) -> None:
    """Height for the motion, and on the side where the words stand a little more."""
    shown = view.angle if len(view.angle) else np.array([view.start, view.final])
    low, high = float(min(shown.min(), view.start, view.final)), float(max(shown.max(), view.start, view.final))
    height = max(high - low, 1e-9)
    rising = view.final >= view.start
    axes.set_ylim(low - height * (_WORDS if rising else 0.08), high + height * (0.08 if rising else _WORDS))


def _stops(axes: Axes, view: StepView, stops: float, palette: Palette) -> None:
    for side in (-1, 1):
        reached = float(np.max(side * view.angle, initial=0.0))
        if reached < _NEAR_STOP * stops:
            continue
        low, high = axes.get_ylim()
        edge = 1.12 * max(stops, reached)
        axes.set_ylim(min(low, -edge) if side < 0 else low, max(high, edge) if side > 0 else high)
        axes.axhspan(side * stops, side * 10 * stops, facecolor="none", edgecolor=palette.limit, hatch="////",
                     linewidth=0.8, alpha=0.7)  # fmt: skip
        axes.annotate("end stop", (view.span[1], side * stops), xytext=(-2, -3 * side), textcoords="offset points",
                      ha="right", va="top" if side > 0 else "bottom", color=palette.limit, fontsize=8)  # fmt: skip


def _words(axes: Axes, view: StepView, words: list[tuple[str, str]]) -> None:
    """Names of what is drawn, in the corner that the motion leaves free."""
    rising = view.final >= view.start
    for number, (text, colour) in enumerate(words if not rising else words[::-1]):
        axes.annotate(text, (1, 0 if rising else 1), xycoords="axes fraction",
                      xytext=(-2, (4 + 11 * number) if rising else (-4 - 11 * number)), textcoords="offset points",
                      ha="right", va="bottom" if rising else "top", color=colour, fontsize=8.2)  # fmt: skip
