"""Does the model leave anything but noise? Model minus measurement, in standard uncertainties, against frequency.

Filled circles: along the measured response (gain); open circles: across it (phase, times gain). Where the model is
true both scatter with standard deviation one and 95 % lie within the shade; a run of one sign is something the model
lacks.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from freqid.errors import EstimationError
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.identification import Identification
from freqid.report.envelope import thinned
from freqid.report.figure_style import LIGHT, MARK, Palette, dress, new_figure
from freqid.report.gain_and_phase import frequency_ticks
from freqid.second_order import SecondOrder

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["draw_residuals", "residual_figure", "scaled_residuals"]

_LINEAR_UP_TO = 8.0  # standard uncertainties; what goes further is shown on a logarithmic rest of the axis


def residual_figure(identification: Identification, *, palette: Palette = LIGHT) -> Figure:
    """The residual ladder as a figure of its own."""
    figure, (axes,) = new_figure(height=2.6, palette=palette)
    draw_residuals(axes, identification, palette=palette)
    return figure


def draw_residuals(axes: Axes, identification: Identification, *, palette: Palette = LIGHT) -> None:
    """Draw the residual ladder into `axes`."""
    dress(axes, palette)
    response = identification.response
    usable = (response.frequency > 0) & (response.variance > 0) & (response.gain > 0)
    if not usable.any():
        raise EstimationError("no line of the frequency response has an uncertainty to measure residuals by")
    frequency = response.frequency[usable]
    residual = scaled_residuals(response, identification.model.model)[usable]
    coverage = response.coverage[usable]
    low, high = float(frequency[0]) / 1.12, float(frequency[-1]) * 1.12
    axes.set_xscale("log")
    frequency_ticks(axes, (low, high))
    _shade(axes, frequency, coverage, (low, high), palette)
    colour = palette.frequency_test
    for part, face in ((residual.real, colour), (residual.imag, palette.paper)):
        axes.plot(*thinned(frequency, part, points=800), MARK["frequency_test"], markersize=3.6, markerfacecolor=face,
                  markeredgecolor=colour, markeredgewidth=0.8)  # fmt: skip
    axes.axhline(0, color=palette.model, linewidth=1.0)
    _heights(axes, residual, coverage)
    axes.set(xlabel="frequency (Hz)", ylabel="model − measurement\n(standard uncertainties)")
    inside = np.count_nonzero(np.abs(residual.real) <= coverage) + np.count_nonzero(np.abs(residual.imag) <= coverage)
    axes.set_title(f"● gain   ○ phase   {inside} of {2 * len(residual)} within the shade, 95 % expected", loc="left",
                   fontsize=8.5, color=palette.model)  # fmt: skip


def scaled_residuals(response: FrequencyResponse, model: SecondOrder) -> NDArray[np.complex128]:
    """Model minus measurement (F,), turned so that the measurement is real, in standard uncertainties."""
    direction = response.response / np.maximum(response.gain, 1e-300)
    difference = (model.response(response.frequency) - response.response) / direction
    return np.asarray(difference / np.sqrt(np.maximum(response.variance, 1e-300) / 2))


def _shade(
    axes: Axes, frequency: NDArray[np.float64], coverage: NDArray[np.float64], band: tuple[float, float],
    palette: Palette,
) -> None:  # fmt: skip
    grid = np.concatenate([[band[0]], frequency, [band[1]]])
    half = np.concatenate([coverage[:1], coverage, coverage[-1:]])
    axes.fill_between(grid, -half, half, color=palette.faint, alpha=0.6, linewidth=0)


def _heights(axes: Axes, residual: NDArray[np.complex128], coverage: NDArray[np.float64]) -> None:
    reach = float(max(np.max(np.abs(residual.real)), np.max(np.abs(residual.imag)), np.max(coverage)))
    if reach > _LINEAR_UP_TO:
        axes.set_yscale("symlog", linthresh=_LINEAR_UP_TO / 2)
        reach *= 1.5
    axes.set_ylim(-1.15 * reach, 1.15 * reach)
