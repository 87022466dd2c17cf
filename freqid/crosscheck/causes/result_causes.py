"""Which causes do the results alone speak for, without the raw runs?"""

from __future__ import annotations

import numpy as np

from freqid.crosscheck.comparison_result import Cause, ComparedRow
from freqid.crosscheck.evidence import Evidence
from freqid.estimate.model import IdentifiedModel
from freqid.step_test.step_result import StepResult

__all__ = ["causes_from_results"]

BEYOND_CHANCE = 1e-4  # of a false alarm: many causes are looked at


def causes_from_results(evidence: Evidence) -> tuple[Cause, ...]:
    """Causes for which the compared rows and the two results speak.

    Where the raw records are at hand the mechanisms have been tried on them, and only what none of them explains is
    left to be told.
    """
    rows, model, step = evidence.rows, evidence.model, evidence.step
    if evidence.gains_are_opposite:
        return (_reversed(model, step),)
    if evidence.recorded.step_runs and evidence.recorded.response_runs:
        found = [_inadequate_model(model)]
    elif evidence.check.verdict == "agree":
        found = []
    else:
        found = [_scale_error(rows), _time_scale(rows), _inadequate_model(model), _unequal_steps(step)]
    return tuple(c for c in found if c is not None)


def _reversed(model: IdentifiedModel, step: StepResult) -> Cause:
    return Cause(
        cause="sensor_reversed",
        strength=0.95,
        evidence=(
            f"The gain is {model.model.gain:+.3g} {model.angle_unit}/V in the frequency test and"
            f" {step.model.gain:+.3g} in the step test: sensor or output is reversed in one of them."
        ),
        settling_test="Apply a small voltage by hand and see which way the angle moves in either log.",
    )


def _relative(row: ComparedRow) -> tuple[float, float] | None:
    """Relative difference and its standard uncertainty."""
    if row.difference is None or row.step_test is None or row.step_test.value == 0:
        return None
    reference = abs(row.step_test.value)
    return row.difference.value / reference, row.difference.standard_uncertainty / reference


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


def _time_scale(rows: dict[str, ComparedRow]) -> Cause | None:
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


def _inadequate_model(model: IdentifiedModel) -> Cause | None:
    if not np.isfinite(model.adequacy.p_value) or model.adequacy.p_value >= BEYOND_CHANCE:
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
    beyond = _beyond_chance(len(up) + len(down) - 2)
    if ratio < beyond:
        return None
    return Cause(
        cause="unequal_directions",
        strength=float(np.clip(1 - beyond / ratio, 0.1, 0.9)),
        evidence=(
            f"Steps up give a static gain {difference:+.3g} {step.angle_unit}/V different from steps down "
            f"({ratio:.2g} standard "
            "uncertainties): friction, hysteresis or an operating point that moves the spring's stiffness."
        ),
    )


def _beyond_chance(degrees_of_freedom: int) -> float:
    """Student's t that noise alone passes in one of 10 000 tests."""
    from scipy.special import stdtrit

    return float(stdtrit(degrees_of_freedom, 1 - BEYOND_CHANCE / 2))
