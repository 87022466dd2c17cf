"""The picture of a cause: every series drawn where its numbers say, every label shown, words for all."""

from __future__ import annotations

import numpy as np
import pytest
from matplotlib.colors import same_color
from report_rig import exhibit, full_inputs

from freqid.report import cause_figure, draw_report, write_report
from freqid.report.figure_style import DARK, LIGHT, Palette, svg_text


@pytest.mark.parametrize("palette", [LIGHT, DARK])
def test_each_series_is_drawn_with_its_numbers_in_the_colour_of_its_source(palette: Palette) -> None:
    """Points, line, band and limit stand at the exhibit's coordinates; sources keep their colours."""
    shown = exhibit()
    (axes,) = cause_figure(shown, palette=palette).axes
    points, line, band, limit = shown.series
    drawn = {tuple(np.round(found.get_ydata(), 9)): found for found in axes.get_lines()}
    for series, colour in ((points, palette.step_test), (line, palette.model), (limit, palette.limit)):
        assert same_color(drawn[tuple(np.round(series.y, 9))].get_color(), colour)
    areas = [one for one in axes.collections if one.get_zorder() == 1 and len(one.get_paths()[0].vertices) > 8]
    (area,) = areas
    assert band.upper is not None
    heights = area.get_paths()[0].vertices[:, 1]
    assert heights.min() == band.y.min() and heights.max() == band.upper.max()
    assert axes.get_yscale() == "log" and axes.get_xscale() == "linear"
    assert axes.get_ylabel() == "amplitude (deg)" and axes.get_xlabel() == "half cycle"


def test_every_label_is_written_once() -> None:
    """The key above the axes holds each label of the exhibit."""
    text = svg_text(cause_figure(exhibit()))
    for word in ("peaks, 95 %", "viscous &lt;decay&gt;", "noise", "stop"):
        assert text.count(word) == 1


def test_the_page_shows_the_card_with_what_speaks_for_and_against() -> None:
    """Evidence, counter-evidence and settling test stand in the page, the card has a caption and an alternative."""
    inputs = full_inputs()
    figures = draw_report(inputs)
    assert figures["cause_amplitude_dependence"].caption == "Peaks after a step."
    page = write_report(inputs, figures=figures)
    assert 'id="figure-cause_amplitude_dependence"' in page
    for words in ("Large steps are &lt;damped&gt; more &amp; longer.", "Two &lt;small&gt; steps are not.",
                  "A test at half the amplitude."):  # fmt: skip
        assert words in page
