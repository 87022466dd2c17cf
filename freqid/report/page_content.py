"""Which numbers and sentences stand on the report page? Everything that was computed, in plain text, unescaped.

All rounding follows `freqid.report.quantity_words`. The template escapes what it places.
"""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Mapping
from dataclasses import fields
from typing import Any

from freqid.crosscheck.comparison_result import Cause, ComparedRow, CrossCheck
from freqid.crosscheck.requirements import RequirementRow
from freqid.estimate.model import IdentifiedModel
from freqid.quantity import Caveat, Quantity
from freqid.records import Run
from freqid.report.data_words import clock_sentences, run_sentences
from freqid.report.quantity_words import (
    interval,
    label_of,
    minus,
    number,
    sentence_case,
    unit_shown,
    with_uncertainty,
    without_unit,
)
from freqid.report.report_inputs import ReportInputs
from freqid.rig import TABLES, Rig
from freqid.step_test.step_result import StepResult

__all__ = ["page_content"]

_VERDICT_WORDS = {
    "agree": "The two tests agree",
    "disagree": "The two tests disagree",
    "unresolved": "Unresolved",
}
_STRENGTHS = ((0.66, "strong"), (0.33, "moderate"), (0.0, "weak"))


def page_content(inputs: ReportInputs) -> dict[str, Any]:
    """Everything the template asks for, but the figures."""
    found, step, check = inputs.identification, inputs.step_result, inputs.crosscheck
    return {
        "name": inputs.rig.name,
        "created": inputs.created,
        "simulated": any(run is not None and run.simulated for run in (inputs.response_run, inputs.step_run)),
        "verdict": _verdict(check),
        "compared": [] if check is None else [_compared(row) for row in check.compared],
        "reasons": _reasons(check),
        "joint": _joint(check),
        "causes": [] if check is None else [_cause(cause) for cause in check.causes],
        "requirements": [] if check is None else [_requirement(row) for row in check.requirements],
        "next_test": None if check is None else check.next_test,
        "adequacy": None if found is None else _adequacy(found.model),
        "model_numbers": [] if found is None else _numbers(_named(found.model), found.model.derived),
        "correlations": [] if found is None else _correlations(found.model),
        "transfer_function": None if found is None else _transfer_function(found.model),
        "step_numbers": [] if step is None else _numbers(step.quantities),
        "step_model_numbers": [] if step is None else _numbers(_named(step), step.derived),
        "steps": [] if step is None else _steps(step),
        "data": _data(inputs),
        "caveats": _caveats(inputs),
        "settings": _settings(inputs),
        "rig_tables": _rig_tables(inputs.rig),
        "files": sorted(inputs.files.items()),
        "sources": json.dumps(dict(inputs.files), ensure_ascii=False),
        "versions": sorted(inputs.versions.items()),
        "missing": _missing(inputs),
    }


def _verdict(check: CrossCheck | None) -> dict[str, str]:
    if check is None:
        return {"code": "none", "words": "No verdict yet", "sentence": "The two tests have not been compared."}
    return {"code": check.verdict, "words": _VERDICT_WORDS[check.verdict], "sentence": sentence_case(check.sentence)}


def _compared(row: ComparedRow) -> dict[str, str]:
    unit = next((q.unit for q in (row.frequency_test, row.step_test, row.difference) if q is not None), "")
    return {
        "label": label_of(row.quantity),
        "unit": unit_shown(unit),
        "frequency_test": without_unit(row.frequency_test),
        "step_test": without_unit(row.step_test),
        "difference": without_unit(row.difference),
        "en": "" if row.en is None else minus(f"{row.en:.2f}"),
        "tolerance": "" if row.tolerance is None else f"± {row.tolerance:.3g}",
        "verdict": "" if row.verdict == "not judged" else row.verdict,
    }


def _reasons(check: CrossCheck | None) -> list[str]:
    """Why quantities were not judged, those of one reason in one sentence."""
    grouped: dict[str, list[str]] = {}
    for row in () if check is None else check.compared:
        if row.reason:
            grouped.setdefault(row.reason, []).append(label_of(row.quantity))
    return [f"{', '.join(labels)}: {reason}".rstrip(".") for reason, labels in grouped.items()]


def _joint(check: CrossCheck | None) -> str:
    if check is None or check.joint is None:
        return ""
    joint = check.joint
    return (
        f"All judged quantities together: χ² = {number(joint.statistic)} with {joint.degrees_of_freedom} degrees of "
        f"freedom, {chance(joint.p_value)} of a difference this large or larger if there were none."
    )


def _cause(cause: Cause) -> dict[str, Any]:
    word = next(word for least, word in _STRENGTHS if cause.strength >= least)
    return {
        "figure": f"cause_{cause.cause}",
        "name": sentence_case(cause.cause.replace("_", " ")),
        "strength": f"{cause.strength:.2f}",
        "word": word,
        "evidence": cause.evidence,
        "against": cause.against,
        "settling_test": cause.settling_test,
    }


def _requirement(row: RequirementRow) -> dict[str, str]:
    word = "at most" if row.sense == "max" else "at least"
    return {
        "label": label_of(row.quantity),
        "unit": unit_shown(row.unit),
        "limit": f"{word} {minus(f'{row.limit:.6g}')}",
        "frequency_test": without_unit(row.frequency_test),
        "step_test": without_unit(row.step_test),
        "verdict": row.verdict,
        "reason": row.reason,
    }


def _adequacy(model: IdentifiedModel) -> str:
    fit = model.adequacy
    if not math.isfinite(fit.p_value):
        return "The record leaves no degrees of freedom to test the model against."
    describes = "describes" if fit.adequate else "does not describe"
    words = (
        f"The second-order model {describes} the response within its noise: misfit χ² = {number(fit.statistic)} with "
        f"{fit.degrees_of_freedom} degrees of freedom, {chance(fit.p_value)} of this or more from noise alone."
    )
    better = f" A better structure: {fit.better_structure}." if fit.better_structure else ""
    return f"{words}{better} It explains {minus(f'{100 * model.explained:.4g}')} % of the variance of the angle."


def chance(p_value: float) -> str:
    """A probability in words that never pretends to know the far tail."""
    return "probability below 1e-6" if p_value < 1e-6 else f"probability {p_value:.2g}"


def _named(result: IdentifiedModel | StepResult) -> dict[str, Quantity | None]:
    """The parameters, with what the delay is called where it holds an unknown clock offset."""
    delay = "delay" if result.clock.offset_known else "delay less clock offset"
    return {delay if name == "delay" else name: quantity for name, quantity in result.parameters.items()}


def _numbers(*groups: Mapping[str, Quantity | None]) -> list[dict[str, str]]:
    return [
        {
            "label": label_of(name),
            "value": without_unit(quantity),
            "unit": "" if quantity is None else unit_shown(quantity.unit),
            "interval": interval(quantity),
            "standard": "" if quantity is None else f"{quantity.standard_uncertainty:.{quantity.decimals()}f}",
        }
        for group in groups
        for name, quantity in group.items()
    ]


def _correlations(model: IdentifiedModel) -> list[dict[str, Any]]:
    """The matrix of correlations of the parameters that have a variance, row by row."""
    names = [name for name, quantity in model.parameters.items() if quantity is not None]
    places = [list(model.parameters).index(name) for name in names]
    deviations = [float(model.covariance[n, n]) ** 0.5 for n in places]
    kept = [(n, name, u) for n, name, u in zip(places, names, deviations, strict=True) if u > 0]
    return [
        {"label": label_of(name), "values": [minus(f"{model.covariance[n, m] / (u * w):.2f}") for m, _, w in kept]}
        for n, name, u in kept
    ]


def _transfer_function(model: IdentifiedModel) -> str:
    (k,), (_, b, c) = model.model.coefficients()
    unit = model.angle_unit
    text = f"G(s) = {minus(f'{k:.5g}')} / (s² + {b:.5g} s + {c:.5g}) {unit}/V"
    if not model.clock.offset_known:
        return f"{text}, without the delay, which holds the unknown clock offset"
    return f"{text}, delay {minus(f'{model.model.delay:.4g}')} s"


def _steps(step: StepResult) -> list[dict[str, str]]:
    return [
        {
            "title": f"{one.time:.3f} s, {minus(f'{one.voltage_before:.4g}')} to {minus(f'{one.voltage_after:.4g}')} V",
            "read": "; ".join(f"{label_of(name)} {with_uncertainty(q)}" for name, q in one.quantities.items()),
        }
        for one in step.steps
    ]


def _data(inputs: ReportInputs) -> list[dict[str, Any]]:
    """Per run: what it is, what its clock did, what the import noted."""
    parts: list[tuple[str, Run | None, Any]] = [
        ("Frequency test", inputs.response_run, inputs.identification and inputs.identification.model),
        ("Step test", inputs.step_run, inputs.step_result),
    ]
    return [
        {
            "title": title,
            "sentences": [
                *([] if run is None else run_sentences(run)),
                *([] if result is None else clock_sentences(result.clock)),
            ],
            "origins": [] if run is None else run.origins,
        }
        for title, run, result in parts
        if run is not None or result is not None
    ]


def _caveats(inputs: ReportInputs) -> list[str]:
    """Every caveat once, in the order of the work."""
    found, step, check = inputs.identification, inputs.step_result, inputs.crosscheck
    groups: list[tuple[str, Iterable[Caveat]]] = []
    if found is not None:
        groups.append(("Frequency test", (*found.response.caveats, *found.model.caveats)))
    if step is not None:
        groups.append(("Step test", step.caveats))
    if check is not None:
        groups.append(("Comparison", check.caveats))
    return list(dict.fromkeys(f"{title}: {caveat.message}" for title, caveats in groups for caveat in caveats))


def _settings(inputs: ReportInputs) -> list[tuple[str, str]]:
    found, step = inputs.identification, inputs.step_result
    rows: list[tuple[str, str]] = []
    if found is not None:
        rows.append(("frequency test, runs", ", ".join(found.model.runs) or "unnamed"))
        settings = found.model.settings.items()
        rows += [(f"frequency test, {key.replace('_', ' ')}", _shown(value)) for key, value in settings]
        rows.append(("frequency test, degrees of freedom", number(found.model.degrees_of_freedom)))
    if step is not None:
        rows.append(("step test, runs", ", ".join(step.runs) or "unnamed"))
        rows.append(("step test, degrees of freedom", number(step.degrees_of_freedom)))
        rows.append(("step test, variance explained", f"{100 * step.explained:.4g} %"))
    return rows


def _rig_tables(rig: Rig) -> list[dict[str, Any]]:
    tables = []
    for table in TABLES:
        values = getattr(rig, table)
        rows = [
            (key.name, _shown(getattr(values, key.name)), key.metadata["unit"].replace("angle_unit", rig.angle_unit))
            for key in fields(values)
            if getattr(values, key.name) is not None
        ]
        tables.append({"name": table, "rows": rows})
    return tables


def _shown(value: object) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    return minus(f"{value:.10g}") if isinstance(value, (int, float)) else str(value)


def _missing(inputs: ReportInputs) -> dict[str, str]:
    """Per part that is missing: one sentence with the command that makes it."""
    folder = inputs.folder
    sentences = {
        "identification": f"No frequency response and model yet: `freqid estimate {folder}` makes them.",
        "step_result": f"No step-test values yet: `freqid steptest {folder}` makes them.",
        "crosscheck": f"No comparison yet: `freqid crosscheck {folder}` makes it.",
        "response_run": f"The raw response run is not at hand: `freqid capture {folder}` makes one.",
        "step_run": f"The raw step run is not at hand: `freqid capture {folder} --kind step` makes one.",
    }
    return {name: text for name, text in sentences.items() if getattr(inputs, name) is None}
