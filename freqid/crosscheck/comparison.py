"""Do two results agree? Quantity by quantity, jointly, and in one verdict.

A row *agrees* where the 95 % interval of its difference lies within ± tolerance; it *disagrees* where that interval
excludes zero and the difference exceeds the tolerance; otherwise it is *unresolved*. One disagreeing row makes the
verdict *disagree*; all judged rows agreeing make it *agree*; anything else is *unresolved*.

En = difference / sqrt(U1^2 + U2^2), U the expanded (95 %) uncertainties: ISO/IEC 17043:2010, B.3.1.3.
Judged are the quantities with a tolerance in the rig sheet; the others are shown for the eye: what one test measured
beside what the other implies (the resonance that the step test predicts, the overshoot that the frequency test
predicts).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from freqid.crosscheck.causes import probable_causes
from freqid.crosscheck.comparison_result import ComparedRow, CrossCheck, JointTest, RowVerdict, Verdict
from freqid.crosscheck.evidence import Evidence, Recorded
from freqid.crosscheck.findings import Findings, findings_of_model, findings_of_step
from freqid.crosscheck.next_test import Forecast, propose_next_test
from freqid.errors import CrossCheckError
from freqid.estimate.model import IdentifiedModel
from freqid.estimate.resonance import ResonanceReading
from freqid.quantity import Quantity
from freqid.second_order import PARAMETER_ORDER
from freqid.step_test.step_result import StepResult

__all__ = ["JUDGED", "compare", "cross_check", "difference_of", "en_number"]

JUDGED = ("gain", "natural_frequency", "damping_ratio")
SHOWN = (
    "resonance_frequency",
    "resonance_gain",
    "half_power_width",
    "static_gain",
    "percent_overshoot",
    "peak_time",
    "delay_time_50",
    "rise_time_0_90",
    "rise_time_10_90",
    "settling_time_5",
    "settling_time_2",
    "time_constant",
    "log_decrement",
)


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
    forecast: Forecast | None = None,
) -> CrossCheck:
    """Compare the frequency test with the step test, with causes and the next test.

    `tolerance` is relative, by parameter name; `resonance` is the peak read off the measured curve (or why there is
    none); `folder` names the test folder in the proposed command; `recorded` hands the raw runs to the causes;
    `forecast` tells how well a further test will measure.
    Raises CrossCheckError where the angle units differ.

    Examples
    --------
    >>> import numpy as np
    >>> from freqid import InputStream, SecondOrder, SimulatedRig, SimulatedSensor, evaluate_steps, identify
    >>> vane = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
    >>> rig = SimulatedRig(model=vane, sensor=SimulatedSensor(sample_rate=60.0, exposure=0.004, noise=0.1))
    >>> time = np.arange(0, 12, 0.01)
    >>> steps = InputStream(time=time, voltage=1.0 * (time % 6 >= 3), hold="zero-order", commanded=True)
    >>> sweep = InputStream(time=time, voltage=np.sin(2 * time**2), hold="zero-order", commanded=True)
    >>> first = identify(rig.run(sweep, kind="response", name="response-001", rng=np.random.default_rng(1)))
    >>> second = evaluate_steps(rig.run(steps, kind="step", name="step-001", rng=np.random.default_rng(2)))
    >>> tolerance = {"gain": 0.05, "natural_frequency": 0.02, "damping_ratio": 0.10}
    >>> cross_check(first.model, second, tolerance=tolerance).verdict
    'agree'
    """
    result = compare(findings_of_model(model, resonance), findings_of_step(step), tolerance=tolerance)
    evidence = Evidence(check=result, model=model, step=step, recorded=recorded or Recorded(), folder=folder)
    result = replace(result, causes=probable_causes(evidence))
    return replace(result, next_test=propose_next_test(result, model, step, folder=folder, forecast=forecast))


def compare(first: Findings, second: Findings, *, tolerance: Mapping[str, float]) -> CrossCheck:
    """Hold any two results against each other; causes and the next test are for the caller to add.

    Rows hold `first` under `frequency_test` and `second` under `step_test`; `labels` says what they are. `tolerance` is
    relative, by parameter name. A quantity that one of them does not speak of at all (typed values) has no row.
    Raises CrossCheckError where the angle units differ.
    """
    if first.angle_unit != second.angle_unit:
        raise CrossCheckError(
            f"the {first.label} is in {first.angle_unit}, the {second.label} in {second.angle_unit}: repeat one with "
            f"the same rig sheet"
        )
    names = [name for name in JUDGED if name in first.parameters and name in second.parameters]
    rows = [_parameter_row(name, first, second, tolerance.get(name)) for name in names]
    if "delay" in first.parameters and "delay" in second.parameters:
        rows.append(_delay_row(first, second))
    rows.extend(_shown_row(name, first, second) for name in SHOWN if _worth_a_row(name, first, second))
    if not rows:
        raise CrossCheckError(f"the {first.label} and the {second.label} have no quantity in common to compare")
    verdict = _verdict(rows)
    return CrossCheck(
        verdict=verdict,
        sentence=_sentence(verdict, rows),
        compared=tuple(rows),
        joint=joint_test(first, second, names),
        labels=(first.label, second.label),
    )


def _parameter_row(name: str, first: Findings, second: Findings, relative: float | None) -> ComparedRow:
    one, other = first.parameters[name], second.parameters[name]
    if one is None or other is None or relative is None:
        return _row(name, one, other, None, "no tolerance in the rig sheet" if relative is None else "undetermined")
    return _row(name, one, other, relative * (abs(one.value) + abs(other.value)) / 2, "")


def _delay_row(first: Findings, second: Findings) -> ComparedRow:
    one, other = first.parameters["delay"], second.parameters["delay"]
    reason = "no tolerance in the rig sheet" if one is not None and other is not None else "undetermined by one test"
    if not (first.offset_known and second.offset_known):
        reason = "contains the unknown offset between the clocks"
        return ComparedRow(
            quantity="delay", frequency_test=one, step_test=other, difference=None, en=None, tolerance=None,
            verdict="not judged", reason=reason,
        )  # fmt: skip
    return _row("delay", one, other, None, reason)


def _worth_a_row(name: str, first: Findings, second: Findings) -> bool:
    """What both speak of and at least one measured itself."""
    return first.knows(name) and second.knows(name) and (name in first.measured or name in second.measured)


def _shown_row(name: str, first: Findings, second: Findings) -> ComparedRow:
    one, other = first.shown(name), second.shown(name)
    if one is None or other is None:
        lacking = first if one is None else second
        reason = lacking.silence.get(name, f"the {name.replace('_', ' ')} does not exist, or is undetermined")
    elif name == "static_gain" and first.kind != second.kind:
        reason = "gain is judged above"
    else:
        measured = [f.label for f in (first, second) if name in f.measured]
        reason = f"measured by the {' and the '.join(measured)}"
        reason += "" if len(measured) == 2 else ", implied by the model of the other"
    return _row(name, one, other, None, reason)


def _row(
    name: str, first: Quantity | None, second: Quantity | None, tolerance: float | None, reason: str
) -> ComparedRow:
    if first is None or second is None:
        return ComparedRow(
            quantity=name, frequency_test=first, step_test=second, difference=None, en=None, tolerance=tolerance,
            verdict="unresolved" if name in JUDGED else "not judged", reason=reason or "undetermined",
        )  # fmt: skip
    difference = difference_of(first, second)
    return ComparedRow(
        quantity=name, frequency_test=first, step_test=second, difference=difference, en=en_number(first, second),
        tolerance=tolerance, verdict=_judge(difference, tolerance), reason=reason,
    )  # fmt: skip


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


def joint_test(first: Findings, second: Findings, names: list[str] | tuple[str, ...] = JUDGED) -> JointTest | None:
    """Chi-square of the differences of the parameters `names` with both covariances; None where that is singular."""
    from scipy.stats import chi2

    known = [name for name in names if first.parameters[name] is not None and second.parameters[name] is not None]
    kept = [PARAMETER_ORDER.index(name) for name in known]
    if not kept:
        return None
    difference = (first.vector - second.vector)[kept]
    covariance: NDArray[np.float64] = (first.covariance + second.covariance)[np.ix_(kept, kept)]
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
    if not judged:
        return "No quantity that both give has a tolerance: nothing is judged."
    if verdict == "agree":
        names = [row.quantity.replace("_", " ") for row in judged]
        listed = names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
        return f"Both tests give the same {listed} within the tolerance{'s' if len(names) > 1 else ''}."
    decisive = [row for row in judged if row.verdict == verdict]
    return "; ".join(_row_sentence(row) for row in decisive) + "."


def _row_sentence(row: ComparedRow) -> str:
    name = row.quantity.replace("_", " ")
    if row.difference is None or row.tolerance is None or row.step_test is None or row.frequency_test is None:
        return f"the {name} is not determined by both tests"
    mean = (abs(row.step_test.value) + abs(row.frequency_test.value)) / 2
    limit = 100 * row.tolerance / mean
    size = row.difference.size
    low, high = size.interval_95
    percent, expanded = Quantity(
        value=100 * size.value / mean, unit="%", standard_uncertainty=100 * size.standard_uncertainty / mean,
        interval_95=(100 * low / mean, 100 * high / mean),
    ).rounded()  # fmt: skip
    if row.verdict == "disagree":
        return f"the {name} differs by {percent} % ± {expanded} %, beyond the tolerance of {limit:.3g} %"
    return (
        f"the {name} differs by {percent} % ± {expanded} %: too uncertain to say whether it is within the "
        f"tolerance of {limit:.3g} %"
    )
