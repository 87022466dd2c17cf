"""How does a result show itself in a notebook? Its numbers as a table, and its figure, in the report's own style.

Results call these from `_repr_html_`, which notebooks look for. The text is HTML, escaped; nothing is fetched.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from html import escape
from typing import TYPE_CHECKING

from freqid.quantity import Caveat, Quantity
from freqid.report.quantity_words import interval, label_of, unit_shown, without_unit

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from freqid.crosscheck.comparison_result import CrossCheck
    from freqid.estimate.identification import Identification
    from freqid.estimate.model import IdentifiedModel
    from freqid.step_test.step_result import StepResult

__all__ = ["cross_check_html", "identification_html", "model_html", "step_html"]


def model_html(model: IdentifiedModel) -> str:
    """Parameters and what follows from them, with 95 % intervals, and the caveats."""
    title = f"Frequency test, second-order model with delay ({', '.join(model.runs) or 'unnamed run'})"
    return _numbers(title, {**model.parameters, **model.derived}) + _caveats(model.caveats)


def identification_html(found: Identification) -> str:
    """Gain and phase as a figure, then the model."""
    from freqid.report.gain_and_phase import gain_and_phase_figure

    return _drawn(gain_and_phase_figure(found)) + model_html(found.model)


def step_html(step: StepResult) -> str:
    """What was read off the steps and the fitted model, with 95 % intervals."""
    title = f"Step test, {len(step.steps)} steps ({', '.join(step.runs) or 'unnamed run'})"
    return _numbers(title, step.quantities) + _numbers("Model fitted to it", step.parameters) + _caveats(step.caveats)


def cross_check_html(check: CrossCheck) -> str:
    """The verdict, the agreement strip, and every quantity by both tests."""
    from freqid.report.agreement_strip import agreement_figure

    rows = [
        (label_of(row.quantity), *(without_unit(q) if q is not None else "" for q in
                                   (row.frequency_test, row.step_test, row.difference)), row.verdict)
        for row in check.compared
    ]  # fmt: skip
    heads = ("quantity", "frequency test", "step test", "difference", "verdict")
    words = f"<p><b>{escape(check.verdict.upper())}</b>: {escape(check.sentence)}</p>"
    return words + _drawn(agreement_figure(check)) + _table("", heads, rows) + _caveats(check.caveats)


def _numbers(title: str, quantities: Mapping[str, Quantity | None]) -> str:
    rows = [
        (label_of(name), without_unit(quantity), "" if quantity is None else unit_shown(quantity.unit),
         interval(quantity))
        for name, quantity in quantities.items()
    ]  # fmt: skip
    return _table(title, ("quantity", "value, 95 %", "unit", "95 % interval"), rows)


def _table(title: str, heads: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    caption = f"<caption>{escape(title)}</caption>" if title else ""
    head = "".join(f"<th>{escape(word)}</th>" for word in heads)
    body = "".join("<tr>" + "".join(f"<td>{escape(cell)}</td>" for cell in row) + "</tr>" for row in rows)
    return f"<table>{caption}<thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"


def _caveats(caveats: Iterable[Caveat]) -> str:
    return "".join(f"<p>Note: {escape(caveat.message)}</p>" for caveat in caveats)


def _drawn(figure: Figure) -> str:
    from freqid.report.figure_style import svg_text

    return f'<div style="max-width: 36rem">{svg_text(figure, name=f"figure-{id(figure)}")}</div>'
