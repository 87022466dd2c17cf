"""Which figures belong to a report, and what does each say in words?

Every figure has a caption, for all readers, and a text alternative with its main numbers, for those who do not see it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

from freqid.errors import FreqidError
from freqid.report.agreement_strip import agreement_figure
from freqid.report.amplitude_ladder import amplitude_figure, rungs_of
from freqid.report.cause_card import cause_figure
from freqid.report.data_ribbon import ribbon_figure, ribbon_of
from freqid.report.gain_and_phase import gain_and_phase_figure
from freqid.report.quantity_words import label_of, sentence_case, with_uncertainty
from freqid.report.report_inputs import ReportInputs
from freqid.report.residual_ladder import residual_figure
from freqid.report.step_figure import step_figure_of

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["ReportFigure", "draw_report"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ReportFigure:
    """A figure with its words; `figure` is None where it could not be drawn, `reason` then says why."""

    caption: str
    alternative: str
    figure: Figure | None = None
    reason: str = ""


def draw_report(inputs: ReportInputs) -> dict[str, ReportFigure]:
    """All figures that the inputs allow, by file name without ending, in the order of the report."""
    makers: dict[str, Callable[[ReportInputs], ReportFigure | None]] = {
        "agreement_strip": _agreement,
        "gain_and_phase": _gain_and_phase,
        "step": _step,
        "amplitude_ladder": _amplitudes,
        "residual_ladder": _residuals,
        "data_ribbon": _ribbon,
    }
    figures = {}
    for name, maker in makers.items():
        try:
            made = maker(inputs)
        except FreqidError as error:
            made = ReportFigure(caption="", alternative="", reason=f"This figure could not be drawn: {error}")
        if made is not None:
            figures[name] = made
    return {**figures, **_causes(inputs)}


def _causes(inputs: ReportInputs) -> dict[str, ReportFigure]:
    """A card for every cause that has an exhibit, named cause_ and its code."""
    check = inputs.crosscheck
    return {
        f"cause_{cause.cause}": ReportFigure(
            figure=cause_figure(cause.exhibit),
            caption=f"{sentence_case(cause.exhibit.title).rstrip('.')}.",
            alternative=f"{cause.exhibit.title.rstrip('.')}. {cause.evidence}",
        )
        for cause in (() if check is None else check.causes)
        if cause.exhibit is not None
    }


def _agreement(inputs: ReportInputs) -> ReportFigure | None:
    if inputs.crosscheck is None:
        return None
    return ReportFigure(
        figure=agreement_figure(inputs.crosscheck),
        caption="Both tests with their 95 % intervals about their common mean, in units of what counts as agreement "
        "(shaded). The thin bar beneath is their difference: the tests agree in a quantity where it lies within "
        "the shade.",
        alternative="Agreement strip. " + " ".join(
            f"{label_of(row.quantity)}: difference {with_uncertainty(row.difference)}, tolerance {row.tolerance:.3g}, "
            f"{row.verdict}."
            for row in inputs.crosscheck.compared
            if row.tolerance is not None
        ),
    )


def _gain_and_phase(inputs: ReportInputs) -> ReportFigure | None:
    found = inputs.identification
    if found is None:
        return None
    band = found.response.frequency
    said = "; ".join(f"{label_of(name)} {with_uncertainty(q)}" for name, q in found.model.parameters.items())
    lag = " The fitted lag is taken out of the phase: it holds an unknown clock offset."
    return ReportFigure(
        figure=gain_and_phase_figure(found, step_result=inputs.step_result),
        caption="Measured frequency response with 95 % intervals, the fitted model, and the noise of one line as the "
        f"gain it would be mistaken for.{'' if found.model.clock.offset_known else lag}",
        alternative=f"Gain and phase at {len(band)} frequencies, {band[0]:.3g} to {band[-1]:.3g} Hz. Model: {said}.",
    )


def _step(inputs: ReportInputs) -> ReportFigure | None:
    run, result = inputs.step_run, inputs.step_result
    if run is None or result is None or not result.steps:
        return None
    predicted = inputs.identification is not None
    caption = "The clearest step in each direction with what was read off it."
    if predicted:
        caption = (
            "Measured steps against what the frequency test's model predicts for the same voltage (band: 95 % of the "
            "motion; grey: with the noise of one reading). Marks and bars: where the step test read its times."
        )
    read = "; ".join(f"{label_of(name)} {with_uncertainty(q)}" for name, q in result.quantities.items())
    return ReportFigure(
        figure=step_figure_of(run, result, identification=inputs.identification, stops=inputs.rig.limits.angle),
        caption=caption,
        alternative=f"Step response, {len(result.steps)} steps. Read off: {read}.",
    )


def _amplitudes(inputs: ReportInputs) -> ReportFigure | None:
    model = None if inputs.identification is None else inputs.identification.model
    rungs = rungs_of(model, inputs.step_result)
    if not rungs:
        return None
    unit = inputs.rig.angle_unit
    return ReportFigure(
        figure=amplitude_figure(rungs, angle_unit=unit),
        caption="Natural frequency and damping ratio against the swing: a linear rig gives a level row of marks. A "
        "step's values follow from its decrement and its first peak.",
        alternative="Amplitude ladder. " + "; ".join(
            f"{rung.source.replace('_', ' ')}, {rung.swing:.3g} {unit}: {with_uncertainty(rung.natural_frequency)}, "
            f"damping ratio {with_uncertainty(rung.damping_ratio)}"
            for rung in rungs
        ) + ".",
    )  # fmt: skip


def _residuals(inputs: ReportInputs) -> ReportFigure | None:
    if inputs.identification is None:
        return None
    return ReportFigure(
        figure=residual_figure(inputs.identification),
        caption="Model minus measurement in standard uncertainties. Where the model is true, 95 % of the marks lie "
        "within the shade and neighbours do not hold together.",
        alternative="Residuals of the model against frequency, in standard uncertainties.",
    )


def _ribbon(inputs: ReportInputs) -> ReportFigure | None:
    if inputs.identification is None or inputs.response_run is None:
        return None
    counts = {name: len(times) for name, times in ribbon_of(inputs.response_run, inputs.identification).events.items()}
    return ReportFigure(
        figure=ribbon_figure(inputs.response_run, inputs.identification),
        caption="Faults of the angle log against time, the deviation of its stamps from a uniform clock, and what the "
        "model leaves of the angle.",
        alternative="Data ribbon. " + "; ".join(f"{name}: {count}" for name, count in counts.items()) + ".",
    )
