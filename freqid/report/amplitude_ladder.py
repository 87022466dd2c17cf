"""Do natural frequency and damping ratio change with the swing? Every run and every step is one mark.

The swing is the largest excursion: of a run from its rest angle, of a step from the level it settles at (static gain
times voltage step). A step's damping ratio follows from its logarithmic decrement d, zeta = d / sqrt(4 pi^2 + d^2), its
natural frequency from the time tp to the first peak, fn = 1 / (2 tp sqrt(1 - zeta^2)) (common practice); their
uncertainties are carried through to first order (JCGM 100:2008, 5.1.2), taking d and tp as independent.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

from freqid.estimate.model import IdentifiedModel
from freqid.quantity import Quantity
from freqid.report.figure_style import LIGHT, MARK, Palette, dress, new_figure
from freqid.report.quantity_words import label_of
from freqid.step_test.step_result import StepReading, StepResult

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["Rung", "amplitude_figure", "draw_amplitude", "rungs_of"]

_QUANTITIES = ("natural_frequency", "damping_ratio")
_DIFFERENT = 1.2  # ratio of the largest to the smallest swing from which the figure says anything


@dataclass(frozen=True, slots=True, kw_only=True)
class Rung:
    """One run or one step: its swing in the angle unit, and what it says of both quantities (None: nothing)."""

    source: Literal["frequency_test", "step_test"]
    swing: float
    natural_frequency: Quantity | None
    damping_ratio: Quantity | None


def rungs_of(model: IdentifiedModel | None, step: StepResult | None) -> tuple[Rung, ...]:
    """Every run and every step that has a swing and says anything; empty where all swings are much the same."""
    rungs = [*_runs(model), *_steps(step)]
    swings = [rung.swing for rung in rungs]
    return tuple(rungs) if swings and max(swings) > _DIFFERENT * min(swings) else ()


def amplitude_figure(rungs: tuple[Rung, ...], *, angle_unit: str, palette: Palette = LIGHT) -> Figure:
    """Both quantities against the swing, one above the other."""
    figure, axes = new_figure(height=4.0, rows=2, palette=palette)
    for one, name in zip(axes, _QUANTITIES, strict=True):
        draw_amplitude(one, rungs, name=name, angle_unit=angle_unit, palette=palette)
    axes[0].set_xlabel("")
    axes[0].tick_params(labelbottom=False)
    return figure


def draw_amplitude(
    axes: Axes, rungs: tuple[Rung, ...], *, name: str, angle_unit: str, palette: Palette = LIGHT
) -> None:
    """One quantity ("natural_frequency" or "damping_ratio") against the swing, with 95 % bars, into `axes`."""
    dress(axes, palette)
    words = {"frequency_test": ("● a run of the frequency test, 95 %", 0.0, "left"),
             "step_test": ("◆ a step, 95 %", 1.0, "right")}  # fmt: skip
    for source in ("frequency_test", "step_test"):
        found = [(rung.swing, q) for rung in rungs if rung.source == source and (q := getattr(rung, name)) is not None]
        if not found:
            continue
        colour = getattr(palette, source)
        axes.errorbar([swing for swing, _ in found], [q.value for _, q in found],
                      yerr=[q.expanded_uncertainty for _, q in found], fmt=MARK[source],
                      color=colour, markersize=4.6, elinewidth=0.9, capsize=0, markeredgewidth=0)  # fmt: skip
        text, place, side = words[source]
        axes.annotate(text, (place, 1), xycoords="axes fraction", xytext=(0, 3), ha=side,
                      textcoords="offset points", color=colour, fontsize=8.5)  # fmt: skip
    axes.set_xlim(0, 1.06 * max(rung.swing for rung in rungs))
    axes.margins(y=0.15)
    axes.set_xlabel(f"largest swing ({angle_unit})")
    axes.set_ylabel(f"{label_of(name)}{' (Hz)' if name == 'natural_frequency' else ''}".replace(" ", "\n", 1))


def _runs(model: IdentifiedModel | None) -> list[Rung]:
    if model is None or model.amplitude is None:
        return []
    if model.dependence is None:
        measured = [(model.amplitude.peak_angle, model.parameters)]
    else:
        measured = [(point.amplitude.peak_angle, dict(point.quantities)) for point in model.dependence.points]
    return [
        Rung(source="frequency_test", swing=swing, natural_frequency=found.get("natural_frequency"),
             damping_ratio=found.get("damping_ratio"))
        for swing, found in measured
    ]  # fmt: skip


def _steps(step: StepResult | None) -> list[Rung]:
    found = []
    for reading in () if step is None else step.steps:
        assert step is not None
        damping = _damping(reading)
        frequency = _frequency(reading, damping)
        swing = abs(step.model.gain * (reading.voltage_after - reading.voltage_before))
        if swing > 0 and damping is not None:
            found.append(Rung(source="step_test", swing=swing, natural_frequency=frequency, damping_ratio=damping))
    return found


def _damping(reading: StepReading) -> Quantity | None:
    decrement = reading.quantities.get("log_decrement")
    if decrement is None or decrement.value <= 0:
        return None
    length = math.hypot(2 * math.pi, decrement.value)
    return _scaled(decrement, decrement.value / length, 4 * math.pi**2 / length**3, "1")


def _frequency(reading: StepReading, damping: Quantity | None) -> Quantity | None:
    peak = reading.quantities.get("peak_time")
    if peak is None or damping is None or peak.value <= 0:
        return None
    below = 1 - damping.value**2
    frequency = 1 / (2 * peak.value * math.sqrt(below))
    relative = math.hypot(
        peak.standard_uncertainty / peak.value, damping.value * damping.standard_uncertainty / below
    )
    widening = peak.expanded_uncertainty / peak.standard_uncertainty if peak.standard_uncertainty > 0 else 1.96
    half = widening * relative * frequency
    return Quantity(
        value=frequency, unit="Hz", standard_uncertainty=relative * frequency,
        interval_95=(frequency - half, frequency + half),
    )  # fmt: skip


def _scaled(quantity: Quantity, value: float, slope: float, unit: str) -> Quantity:
    """The quantity under a function with this value and slope there."""
    half = slope * quantity.expanded_uncertainty
    return Quantity(
        value=value, unit=unit, standard_uncertainty=slope * quantity.standard_uncertainty,
        interval_95=(value - half, value + half),
    )  # fmt: skip
