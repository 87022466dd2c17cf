"""Do both tests see the same resonance? The peak enlarged, one box of 95 % in frequency and height for each test.

The box of the frequency test is read off the measured curve itself where its lines allow that
(`freqid.estimate.resonance`), else it is that of the fitted model; the box of the step test is what its model predicts.
Measured lines that fall into the window have their own intervals. A box is the 95 % interval of each coordinate by
itself; where the two are correlated the joint region is a tilted ellipse.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.identification import Identification
from freqid.estimate.model import IdentifiedModel
from freqid.estimate.resonance import read_resonance
from freqid.quantity import Quantity
from freqid.report.figure_style import LIGHT, MARK, Palette, dress
from freqid.report.quantity_words import with_uncertainty
from freqid.report.response_display import model_curve, shown_response
from freqid.step_test.step_result import StepResult

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["draw_peaks", "has_peak"]

_SMALLEST_WINDOW = 0.004  # relative half-width; keeps a perfect agreement from being blown up without end
_PART_OF_WIDTH = 0.3  # of the half-power half-width is always shown, so that the boxes are seen against the peak


@dataclass(frozen=True, slots=True, kw_only=True)
class _Peak:
    frequency: Quantity
    gain: Quantity
    source: str


def has_peak(model: IdentifiedModel | StepResult) -> bool:
    """Whether the fitted model has a resonance (damping ratio below 1/√2) that is determined."""
    return _peak(model) is not None


def draw_peaks(
    axes: Axes, identification: Identification, *, step_result: StepResult | None = None, palette: Palette = LIGHT
) -> None:
    """The peak of both tests into `axes`, enlarged; nothing where the frequency test has no resonance."""
    dress(axes, palette)
    modelled = _peak(identification.model)
    predicted = None if step_result is None else _peak(step_result)
    if modelled is None:
        return
    measured = _measured_peak(identification.response) or modelled
    unit = identification.model.angle_unit
    peaks = [peak for peak in (measured, predicted) if peak is not None]
    band = _window(axes, identification.model, peaks)
    curve = model_curve(identification.model, band)
    axes.fill_between(curve.frequency, curve.gain - curve.gain_half, curve.gain + curve.gain_half, color=palette.model,
                      alpha=0.2, linewidth=0)  # fmt: skip
    axes.plot(curve.frequency, curve.gain, color=palette.model, linewidth=1.0)
    lines = shown_response(identification.response, identification.model)
    seen = (lines.frequency > band[0]) & (lines.frequency < band[1])
    axes.errorbar(lines.frequency[seen], lines.gain[seen], yerr=lines.gain_half[seen], fmt=MARK["frequency_test"],
                  color=palette.frequency_test, markersize=3.2, elinewidth=0.9, alpha=0.75)  # fmt: skip
    if predicted is not None:
        _draw_box(axes, predicted, source="step_test", palette=palette)
    _draw_box(axes, measured, source="frequency_test", palette=palette)
    axes.set(xlabel="frequency (Hz), about the resonance", ylabel=f"gain ({unit}/V)")
    _words(axes, measured, predicted, palette)


def _peak(model: IdentifiedModel | StepResult) -> _Peak | None:
    derived = model.derived
    frequency, gain = derived.get("resonance_frequency"), derived.get("resonance_gain")
    if frequency is None or gain is None or frequency.value <= 0:
        return None
    source = "step test predicts" if isinstance(model, StepResult) else "frequency test's model"
    return _Peak(frequency=frequency, gain=gain, source=source)


def _measured_peak(response: FrequencyResponse) -> _Peak | None:
    reading = read_resonance(response)
    if isinstance(reading, str):
        return None
    return _Peak(frequency=reading.resonance_frequency, gain=reading.resonance_gain, source="measured")


def _window(axes: Axes, model: IdentifiedModel, peaks: list[_Peak]) -> tuple[float, float]:
    """Set the window that shows all boxes whole, with room about them; returns its frequencies."""
    low = min(peak.frequency.interval_95[0] for peak in peaks)
    high = max(peak.frequency.interval_95[1] for peak in peaks)
    centre = (low + high) / 2
    half = max(1.6 * (high - low), _SMALLEST_WINDOW * centre, _PART_OF_WIDTH * model.model.damping_ratio * centre)
    half = min(half, 0.9 * centre)
    bottom = min(peak.gain.interval_95[0] for peak in peaks)
    top = max(peak.gain.interval_95[1] for peak in peaks)
    ends = np.abs(model.model.response(np.array([centre - half, centre + half])))
    bottom, top = min(bottom, float(ends.min())), max(top, float(np.abs(model.model.response(np.array([centre])))[0]))
    room = max(0.12 * (top - bottom), 1e-4 * abs(top))
    axes.set(xlim=(centre - half, centre + half), ylim=(bottom - room, top + 6 * room))
    return centre - half, centre + half


def _draw_box(axes: Axes, peak: _Peak, *, source: str, palette: Palette) -> None:
    from matplotlib.patches import Rectangle

    colour = getattr(palette, source)
    (left, right), (bottom, top) = peak.frequency.interval_95, peak.gain.interval_95
    axes.add_patch(Rectangle((left, bottom), right - left, top - bottom, facecolor=colour, alpha=0.25, linewidth=0))
    axes.add_patch(Rectangle((left, bottom), right - left, top - bottom, fill=False, edgecolor=colour, linewidth=1.1))
    mark = MARK["frequency_test"] if source == "frequency_test" else MARK["step_test"]
    axes.plot([peak.frequency.value], [peak.gain.value], marker=mark, color=colour, markersize=4.5, zorder=4)


def _words(axes: Axes, measured: _Peak, predicted: _Peak | None, palette: Palette) -> None:
    lines = [(f"● {_said(measured)}", palette.frequency_test)]
    if predicted is not None:
        lines.append((f"◆ {_said(predicted)}", palette.step_test))
    for number, (text, colour) in enumerate(lines):
        axes.annotate(text, (0, 1), xycoords="axes fraction", xytext=(5, -3 - 12 * number), textcoords="offset points",
                      va="top", color=colour, fontsize=8)  # fmt: skip


def _said(peak: _Peak) -> str:
    return f"{peak.source} {with_uncertainty(peak.gain)} at {with_uncertainty(peak.frequency)}"
