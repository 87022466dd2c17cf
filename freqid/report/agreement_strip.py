"""Do the two tests agree? One row a quantity, the axis in units of its tolerance.

Both tests' 95 % intervals are drawn about their common mean, beneath them the difference with its interval: they
agree where that thin ink bar lies within the shade from -1 to +1. The verdict word stands at the end of the row.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from freqid.crosscheck.comparison_result import CrossCheck
from freqid.report.agreement_scale import Bar, half_span, scaled_rows
from freqid.report.figure_style import LIGHT, MARK, Palette, dress, new_figure
from freqid.report.quantity_words import minus

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["agreement_figure", "draw_agreement"]

_ROW_HEIGHT, _REST_HEIGHT = 0.62, 0.95  # inches
_OFFSETS = {"frequency_test": -0.24, "step_test": -0.02, "difference": 0.22}  # of a row; downwards


def agreement_figure(crosscheck: CrossCheck, *, palette: Palette = LIGHT) -> Figure:
    """The agreement strip as a figure of its own."""
    n_rows = max(len(scaled_rows(crosscheck)), 1)
    figure, (axes,) = new_figure(height=_ROW_HEIGHT * n_rows + _REST_HEIGHT, palette=palette)
    draw_agreement(axes, crosscheck, palette=palette)
    return figure


def draw_agreement(axes: Axes, crosscheck: CrossCheck, *, palette: Palette = LIGHT) -> None:
    """Draw the strip into `axes`; a comparison without tolerances is said in words."""
    from matplotlib.ticker import MaxNLocator

    dress(axes, palette)
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    rows = scaled_rows(crosscheck)
    span = half_span(rows)
    axes.set(xlim=(-span, span), ylim=(max(len(rows), 1) - 0.45, -0.75))
    axes.spines["left"].set_visible(False)
    axes.set_yticks(range(len(rows)), [_two_lines(row.label) for row in rows])
    axes.tick_params(axis="y", length=0)
    axes.axvspan(-1, 1, color=palette.faint, alpha=0.55, linewidth=0)
    axes.axvline(0, color=palette.noise, linewidth=0.6)
    axes.set_xlabel("distance from the common mean, in tolerances")
    if not rows:
        axes.text(0, 0, "no quantity has a tolerance", ha="center", color=palette.model, fontsize=9)
    for number, row in enumerate(rows):
        for source in ("frequency_test", "step_test", "difference"):
            bar = getattr(row, source)
            if bar is not None:
                _draw_bar(axes, bar, number + _OFFSETS[source], source=source, palette=palette)
        _end_word(axes, row.verdict, number, palette)
    if rows:
        _key(axes, palette)


def _draw_bar(axes: Axes, bar: Bar, height: float, *, source: str, palette: Palette) -> None:
    left, right = axes.get_xlim()
    low, high = min(max(bar.low, left), right), max(min(bar.high, right), left)
    colour = palette.model if source == "difference" else getattr(palette, source)
    width = 1.1 if source == "difference" else 3.2
    axes.plot([low, high], [height, height], color=colour, linewidth=width, solid_capstyle="butt")
    for end, inside in ((low, bar.low >= left), (high, bar.high <= right)):
        if inside:
            axes.plot([end, end], [height - 0.07, height + 0.07], color=colour, linewidth=1.1)
    if left <= bar.value <= right:
        mark = "|" if source == "difference" else MARK[source]  # type: ignore[index]
        axes.plot([bar.value], [height], marker=mark, color=colour, markersize=5.5, markeredgecolor=palette.paper
                  if source != "difference" else colour)  # fmt: skip
    else:
        _arrow(axes, bar.value, height, colour, palette)


def _arrow(axes: Axes, value: float, height: float, colour: str, palette: Palette) -> None:
    """A value off the axis: an arrow at the edge with the value beside it."""
    side = 1 if value > 0 else -1
    edge = axes.get_xlim()[1] * side
    axes.plot([edge], [height], marker=5 if side > 0 else 4, color=colour, markersize=6, clip_on=False)
    axes.annotate(
        minus(f"{value:+.2g}"), (edge, height), xytext=(-7 * side, 0), textcoords="offset points", va="center",
        ha="right" if side > 0 else "left", color=colour, fontsize=8, zorder=5,
        bbox={"facecolor": palette.paper, "edgecolor": "none", "pad": 0.6},  # the number hides the end of its bar
    )  # fmt: skip


def _end_word(axes: Axes, verdict: str, number: int, palette: Palette) -> None:
    axes.annotate(
        verdict, (1, number), xycoords=axes.get_yaxis_transform(), xytext=(5, 0), textcoords="offset points",
        ha="left", va="center", color=palette.model, fontsize=9.5, fontweight="bold", annotation_clip=False,
    )  # fmt: skip


def _key(axes: Axes, palette: Palette) -> None:
    """Names of the three bars, once, above the first row."""
    words = (
        (0.0, "left", "● frequency test", palette.frequency_test),
        (0.5, "center", "◆ step test", palette.step_test),
        (1.0, "right", "| difference", palette.model),
    )
    for place, side, text, colour in words:
        axes.annotate(text, (place, 1), xycoords="axes fraction", xytext=(0, 3), textcoords="offset points",
                      ha=side, va="bottom", color=colour, fontsize=9)  # fmt: skip


def _two_lines(label: str) -> str:
    words = label.split(" ")
    return label if len(words) < 2 else f"{words[0]}\n{' '.join(words[1:])}"
