"""What speaks for a cause? One small figure per cause, drawn from its exhibit in the colours of the sources.

Points carry their 95 % bars, a band is shaded, what is drawn of the model is an ink line, limits are hatched. Labels
stand beside their series where there is room: at the right end of lines, else in a line of words above the axes.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from freqid.crosscheck.exhibit import Exhibit, Series, SeriesSource
from freqid.report.envelope import thinned
from freqid.report.figure_style import LIGHT, Palette, dress, new_figure

if TYPE_CHECKING:
    from matplotlib.artist import Artist
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["cause_figure", "draw_exhibit"]

_HEIGHT = 2.5  # inches
_COLOUR: dict[SeriesSource, str] = {
    "frequency test": "frequency_test",
    "step test": "step_test",
    "model": "model",
    "noise": "noise",
    "distortion": "distortion",
    "limit": "limit",
}
_SIGN = {"frequency test": "●", "step test": "◆", "model": "—", "noise": "—", "distortion": "▲", "limit": "▨"}
_MARK = {"frequency test": "o", "step test": "D", "model": "s", "noise": ".", "distortion": "^", "limit": "_"}
_BREADTH = 78  # letters of the key that fit above the axes


def cause_figure(exhibit: Exhibit, *, palette: Palette = LIGHT) -> Figure:
    """The exhibit as a figure of its own."""
    lines = _key_lines(exhibit.series)
    figure, (axes,) = new_figure(height=_HEIGHT + 0.17 * len(lines), palette=palette)
    draw_exhibit(axes, exhibit, palette=palette)
    return figure


def draw_exhibit(axes: Axes, exhibit: Exhibit, *, palette: Palette = LIGHT) -> None:
    """Draw the exhibit into `axes`: its series, labelled axes, and a key of what is what."""
    dress(axes, palette)
    for name in exhibit.logarithmic:
        (axes.set_xscale if name == "x" else axes.set_yscale)("log")
    for series in exhibit.series:
        _draw(axes, series, palette)
    axes.set_xlabel(_axis(exhibit.x_label, exhibit.x_unit))
    axes.set_ylabel(_axis(exhibit.y_label, exhibit.y_unit))
    axes.margins(x=0.03, y=0.12)
    _plain_numbers(axes, exhibit)
    _key(axes, exhibit.series, palette)


def _draw(axes: Axes, series: Series, palette: Palette) -> None:
    colour = getattr(palette, _COLOUR[series.source])
    if series.kind == "band":
        assert series.upper is not None
        hatch = "////" if series.source == "limit" else None
        axes.fill_between(series.x, series.y, series.upper, color="none" if hatch else colour, alpha=0.28, linewidth=0,
                          hatch=hatch, edgecolor=colour, zorder=1)  # fmt: skip
    elif series.kind == "line":
        style = "--" if series.source == "limit" else "-"
        axes.plot(*thinned(series.x, series.y), color=colour, linewidth=1.1, linestyle=style, zorder=2)
    else:
        size = 4.2 if len(series.x) <= 60 else 2.4
        axes.errorbar(series.x, series.y, yerr=series.uncertainty, fmt=_MARK[series.source], markersize=size,
                      color=colour, elinewidth=0.9, capsize=0, markeredgewidth=0, zorder=3)  # fmt: skip


def _plain_numbers(axes: Axes, exhibit: Exhibit) -> None:
    from matplotlib.ticker import FuncFormatter, NullFormatter

    for name in exhibit.logarithmic:
        axis = axes.xaxis if name == "x" else axes.yaxis
        axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
        values = np.concatenate([series.x if name == "x" else series.y for series in exhibit.series])
        values = values[values > 0]
        if len(values) and values.max() / values.min() < 20:  # few decades: numbers at 2 and 5 as well
            axis.set_minor_formatter(FuncFormatter(lambda v, _: f"{v:g}" if f"{v:.0e}"[0] in "25" else ""))
        else:
            axis.set_minor_formatter(NullFormatter())


def _key(axes: Axes, series: Sequence[Series], palette: Palette) -> None:
    """What each series is, in its colour, in lines above the axes."""
    from matplotlib.offsetbox import AnchoredOffsetbox, HPacker, TextArea, VPacker

    lines: list[Artist] = [
        HPacker(children=[
            TextArea(text, textprops={"color": getattr(palette, _COLOUR[one.source]), "fontsize": 8.5})
            for one, text in line
        ], pad=0, sep=9)
        for line in _key_lines(series)
    ]  # fmt: skip
    if not lines:
        return
    packed = VPacker(children=lines, pad=0, sep=2)
    axes.add_artist(AnchoredOffsetbox("lower left", child=packed, pad=0, frameon=False, borderpad=0.2,
                                      bbox_to_anchor=(0, 1), bbox_transform=axes.transAxes))  # fmt: skip


def _key_lines(series: Sequence[Series]) -> list[list[tuple[Series, str]]]:
    """The key's words, broken into lines that fit."""
    lines: list[list[tuple[Series, str]]] = []
    used, said = _BREADTH, set()
    for one in series:
        text = f"{'▒' if one.kind == 'band' and one.source != 'limit' else _sign(one)} {one.label}"
        if not one.label or (text, one.source) in said:
            continue
        said.add((text, one.source))
        if used + len(text) > _BREADTH:
            lines.append([])
            used = 0
        lines[-1].append((one, text))
        used += len(text) + 3
    return lines


def _sign(series: Series) -> str:
    return _SIGN[series.source] if series.kind == "points" else ("▨" if series.source == "limit" and
                                                                  series.kind == "band" else "—")  # fmt: skip


def _axis(label: str, unit: str) -> str:
    return f"{label} ({unit})" if unit and unit != "1" else label
