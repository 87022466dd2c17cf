"""Which causes do the results alone speak for, without the raw runs?"""

from __future__ import annotations

import numpy as np

from freqid.crosscheck.comparison_result import Cause, ComparedRow, CrossCheck
from freqid.crosscheck.evidence import Evidence
from freqid.estimate.model import IdentifiedModel
from freqid.step_test.step_result import StepResult

__all__ = ["causes_from_results"]


def causes_from_results(evidence: Evidence) -> tuple[Cause, ...]:
    """Causes for which the compared rows and the two results speak."""
    if evidence.check.verdict == "agree":
        return ()
    rows, model, step = evidence.rows, evidence.model, evidence.step
    found = [
        _too_little_data(evidence.check, rows),
        _scale_error(rows),
        _time_scale(rows, model, step),
        _further_dynamics(model),
        _unequal_steps(step),
    ]
    return tuple(c for c in found if c is not None)


def _relative(row: ComparedRow) -> tuple[float, float] | None:
    """Relative difference and its standard uncertainty."""
    if row.difference is None or row.step_test is None or row.step_test.value == 0:
        return None
    reference = abs(row.step_test.value)
    return row.difference.value / reference, row.difference.standard_uncertainty / reference


def _too_little_data(check: CrossCheck, rows: dict[str, ComparedRow]) -> Cause | None:
    wide = [
        row.quantity.replace("_", " ")
        for row in rows.values()
        if row.verdict == "unresolved"
        and row.difference is not None
        and row.tolerance is not None
        and row.difference.expanded_uncertainty > row.tolerance
    ]
    if not wide or check.verdict == "disagree":
        return None
    return Cause(
        cause="too_little_data",
        strength=1.0,
        evidence=f"The uncertainty of the difference alone exceeds the tolerance for {', '.join(wide)}.",
    )


def _scale_error(rows: dict[str, ComparedRow]) -> Cause | None:
    gain = rows["gain"]
    others = [rows["natural_frequency"], rows["damping_ratio"]]
    if gain.verdict != "disagree" or any(row.en is None or abs(row.en) > 1 for row in others):
        return None
    relative = _relative(gain)
    assert relative is not None
    return Cause(
        cause="scale_error",
        strength=0.8,
        evidence=(
            f"The gain differs by {100 * relative[0]:+.3g} % while natural frequency and damping ratio agree within "
            f"their "
            "uncertainty: the scale of voltage or angle differs between the tests."
        ),
    )


def _time_scale(rows: dict[str, ComparedRow], model: IdentifiedModel, step: StepResult) -> Cause | None:
    frequency, damping = rows["natural_frequency"], rows["damping_ratio"]
    if frequency.verdict != "disagree" or damping.en is None or abs(damping.en) > 1:
        return None
    relative = _relative(frequency)
    assert relative is not None
    return Cause(
        cause="time_scale",
        strength=0.5,
        evidence=(
            f"The natural frequency differs by {100 * relative[0]:+.3g} % at equal damping ratio: a clock or a sample "
            f"rate stated "
            "wrongly in one test, or a spring that depends on amplitude or temperature."
        ),
    )


def _further_dynamics(model: IdentifiedModel) -> Cause | None:
    if not np.isfinite(model.adequacy.p_value) or model.adequacy.adequate:
        return None
    excess = float(np.sqrt(model.adequacy.statistic / model.adequacy.degrees_of_freedom))
    return Cause(
        cause="model_inadequate",
        strength=float(np.clip(1 - 1 / excess, 0.1, 0.9)),
        evidence=(
            f"The frequency response misses a second-order model by {excess:.3g} times its noise: nonlinearity or "
            f"further dynamics, "
            "which the two tests weigh differently."
        ),
    )


def _unequal_steps(step: StepResult) -> Cause | None:
    gains = [(s.direction, q.value, q.standard_uncertainty) for s in step.steps if (q := s.quantities["static_gain"])]
    up = np.array([(v, u) for d, v, u in gains if d == "up"])
    down = np.array([(v, u) for d, v, u in gains if d == "down"])
    if len(up) < 2 or len(down) < 2:
        return None
    difference = up[:, 0].mean() - down[:, 0].mean()
    spread = np.sqrt(up[:, 0].var(ddof=1) / len(up) + down[:, 0].var(ddof=1) / len(down))
    floor = np.sqrt((up[:, 1] ** 2).sum() / len(up) ** 2 + (down[:, 1] ** 2).sum() / len(down) ** 2)
    ratio = abs(difference) / max(spread, floor)
    if ratio < 3:
        return None
    return Cause(
        cause="unequal_directions",
        strength=float(np.clip(1 - 3 / ratio, 0.1, 0.9)),
        evidence=(
            f"Steps up give a static gain {difference:+.3g} {step.angle_unit}/V different from steps down "
            f"({ratio:.2g} standard "
            "uncertainties): friction, hysteresis or an operating point that moves the spring's stiffness."
        ),
    )
