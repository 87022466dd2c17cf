"""Do the two tests agree? Quantity by quantity, jointly, and in one verdict.

A row *agrees* where the 95 % interval of its difference lies within ± tolerance; it *disagrees* where that interval
excludes
zero and the difference exceeds the tolerance; otherwise it is *unresolved*. One disagreeing row makes the verdict
*disagree*; all
judged rows agreeing make it *agree*; anything else is *unresolved*.

En = difference / sqrt(U1^2 + U2^2), U the expanded (95 %) uncertainties: ISO/IEC 17043:2010, B.3.1.3.
Judged are the quantities with a tolerance in the rig sheet; the others are shown for the eye.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from freqid.crosscheck.causes import probable_causes
from freqid.crosscheck.comparison_result import ComparedRow, CrossCheck, JointTest, RowVerdict, Verdict
from freqid.crosscheck.evidence import Evidence, Recorded
from freqid.crosscheck.next_test import propose_next_test
from freqid.derived import derived_quantities
from freqid.errors import CrossCheckError
from freqid.estimate.model import IdentifiedModel
from freqid.estimate.resonance import ResonanceReading
from freqid.quantity import Quantity
from freqid.resonance_relations import half_power_width_ratio
from freqid.second_order import PARAMETER_ORDER
from freqid.step_test.step_result import StepResult

__all__ = ["cross_check", "difference_of", "en_number", "half_power_width"]

JUDGED = ("gain", "natural_frequency", "damping_ratio")


def en_number(first: Quantity, second: Quantity) -> float | None:
    """Difference over the root sum of squares of the expanded uncertainties; None where both are exact."""
    expanded = float(np.hypot(first.expanded_uncertainty, second.expanded_uncertainty))
    return (first.value - second.value) / expanded if expanded > 0 else None


def difference_of(first: Quantity, second: Quantity) -> Quantity:
    """First minus second, independent; the 95 % half width is the root sum of squares of both half widths."""
    value = first.value - second.value
    half = float(np.hypot(first.expanded_uncertainty, second.expanded_uncertainty))
    return Quantity(
        value=value,
        unit=first.unit,
        standard_uncertainty=float(np.hypot(first.standard_uncertainty, second.standard_uncertainty)),
        interval_95=(value - half, value + half),
    )


def cross_check(
    model: IdentifiedModel,
    step: StepResult,
    *,
    tolerance: Mapping[str, float],
    resonance: ResonanceReading | str = "the measured curve was not given",
    folder: str = "FOLDER",
    recorded: Recorded | None = None,
) -> CrossCheck:
    """Compare the frequency test with the step test.

    `tolerance` is relative, by parameter name; `resonance` is the peak read off the measured curve (or why there is
    none);
    `folder` names the test folder in the proposed command; `recorded` hands the raw runs to the causes.
    Raises CrossCheckError where the angle units differ.
    """
    if model.angle_unit != step.angle_unit:
        raise CrossCheckError(
            f"the frequency test is in {model.angle_unit}, the step test in {step.angle_unit}: repeat one with the "
            f"same rig sheet"
        )
    rows = [_parameter_row(name, model, step, tolerance.get(name)) for name in JUDGED]
    rows.append(_delay_row(model, step))
    rows.extend(_resonance_rows(resonance, step))
    rows.append(_row("static_gain", model.parameters["gain"], step.quantities["static_gain"], None, "gain is judged "
                                                                                                    "above"))
    verdict = _verdict(rows)
    result = CrossCheck(
        verdict=verdict, sentence=_sentence(verdict, rows), compared=tuple(rows), joint=joint_test(model, step)
    )
    evidence = Evidence(check=result, model=model, step=step, recorded=recorded or Recorded())
    result = replace(result, causes=probable_causes(evidence))
    return replace(result, next_test=propose_next_test(result, model, step, folder=folder))


def _parameter_row(name: str, model: IdentifiedModel, step: StepResult, relative: float | None) -> ComparedRow:
    first, second = model.parameters[name], step.parameters[name]
    if first is None or second is None or relative is None:
        return _row(name, first, second, None, "no tolerance in the rig sheet" if relative is None else "undetermined")
    return _row(name, first, second, relative * (abs(first.value) + abs(second.value)) / 2, "")


def _delay_row(model: IdentifiedModel, step: StepResult) -> ComparedRow:
    first, second = model.parameters["delay"], step.parameters["delay"]
    reason = "no tolerance in the rig sheet" if first is not None and second is not None else "undetermined by one test"
    if not (model.clock.offset_known and step.clock.offset_known):
        reason = "contains the unknown offset between the clocks"
        return ComparedRow(
            quantity="delay", frequency_test=first, step_test=second, difference=None, en=None, tolerance=None,
            verdict="not judged", reason=reason,
        )
    return _row("delay", first, second, None, reason)


def half_power_width(step: StepResult) -> Quantity | None:
    """Half-power width that the step test's natural frequency and damping ratio predict, with uncertainty."""
    fn, zeta = step.model.natural_frequency, step.model.damping_ratio
    width = float(half_power_width_ratio(zeta)) * fn
    if not np.isfinite(width):
        return None
    h = 1e-4 * zeta
    by_zeta = (float(half_power_width_ratio(zeta + h)) - float(half_power_width_ratio(zeta - h))) / (2 * h) * fn
    slope = np.array([width / fn, by_zeta])
    u = float(np.sqrt(slope @ step.covariance[1:3, 1:3] @ slope))
    return Quantity.finite_or_none(width, "Hz", u, step.degrees_of_freedom)


def _resonance_rows(reading: ResonanceReading | str, step: StepResult) -> list[ComparedRow]:
    predicted = derived_quantities(
        step.model.vector, step.covariance, angle_unit=step.angle_unit, degrees_of_freedom=step.degrees_of_freedom
    )
    expected = {
        "resonance_frequency": predicted["resonance_frequency"],
        "resonance_gain": predicted["resonance_gain"],
        "half_power_width": half_power_width(step),
    }
    rows = []
    for name, second in expected.items():
        first = None if isinstance(reading, str) else getattr(reading, name)
        reason = reading if isinstance(reading, str) else "read off the measured curve"
        rows.append(_row(name, first, second, None, reason))
    return rows


def _row(
    name: str, first: Quantity | None, second: Quantity | None, tolerance: float | None, reason: str
) -> ComparedRow:
    if first is None or second is None:
        return ComparedRow(
            quantity=name, frequency_test=first, step_test=second, difference=None, en=None, tolerance=tolerance,
            verdict="unresolved" if name in JUDGED else "not judged", reason=reason or "undetermined",
        )
    difference = difference_of(first, second)
    return ComparedRow(
        quantity=name, frequency_test=first, step_test=second, difference=difference, en=en_number(first, second),
        tolerance=tolerance, verdict=_judge(difference, tolerance), reason=reason,
    )


def _judge(difference: Quantity, tolerance: float | None) -> RowVerdict:
    if tolerance is None:
        return "not judged"
    low, high = difference.interval_95
    if -tolerance <= low and high <= tolerance:
        return "agree"
    if (low > 0 or high < 0) and abs(difference.value) > tolerance:
        return "disagree"
    return "unresolved"


def _verdict(rows: list[ComparedRow]) -> Verdict:
    judged = [row.verdict for row in rows if row.verdict != "not judged"]
    if "disagree" in judged:
        return "disagree"
    return "agree" if judged and all(v == "agree" for v in judged) else "unresolved"


def joint_test(model: IdentifiedModel, step: StepResult) -> JointTest | None:
    """Chi-square of the differences of gain, natural frequency and damping ratio with both covariances."""
    from scipy.stats import chi2

    kept = [PARAMETER_ORDER.index(name) for name in JUDGED]
    difference = (model.model.vector - step.model.vector)[kept]
    covariance: NDArray[np.float64] = (model.covariance + step.covariance)[np.ix_(kept, kept)]
    scale = np.sqrt(np.diag(covariance))
    if not (np.all(np.isfinite(covariance)) and np.all(scale > 0)):
        return None
    whitened = difference / scale
    statistic = float(whitened @ np.linalg.lstsq(covariance / np.outer(scale, scale), whitened, rcond=1e-12)[0])
    return JointTest(
        statistic=statistic, degrees_of_freedom=len(kept), p_value=float(chi2.sf(statistic, len(kept)))
    )


def _sentence(verdict: Verdict, rows: list[ComparedRow]) -> str:
    judged = [row for row in rows if row.verdict != "not judged"]
    if verdict == "agree":
        return "Both tests give the same gain, natural frequency and damping ratio within the tolerances."
    decisive = [row for row in judged if row.verdict == verdict]
    return "; ".join(_row_sentence(row) for row in decisive) + "."


def _row_sentence(row: ComparedRow) -> str:
    name = row.quantity.replace("_", " ")
    if row.difference is None or row.tolerance is None or row.step_test is None or row.frequency_test is None:
        return f"the {name} is not determined by both tests"
    mean = (abs(row.step_test.value) + abs(row.frequency_test.value)) / 2
    percent, limit = 100 * abs(row.difference.value) / mean, 100 * row.tolerance / mean
    expanded = 100 * row.difference.expanded_uncertainty / mean
    if row.verdict == "disagree":
        return f"the {name} differs by {percent:.3g} % ± {expanded:.2g} %, beyond the tolerance of {limit:.3g} %"
    return (
        f"the {name} differs by {percent:.3g} % ± {expanded:.2g} %: too uncertain to say whether it is within the "
        f"tolerance of {limit:.3g} %"
    )
