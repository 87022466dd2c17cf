"""Which small picture shows that a mechanism is at work? Data a cause card is drawn from.

Lags, modes and scales are shown in the frequency response, drift against time; everything else in what one healthy rig
leaves over after the steps, all steps laid on one another (steps down turned over), beside what the mechanism would
leave.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from freqid.crosscheck.causes.mechanism_trials import Trial, Trials
from freqid.crosscheck.causes.recorded_tests import RecordedTest
from freqid.crosscheck.evidence import Evidence
from freqid.crosscheck.exhibit import Exhibit, Series, SeriesSource
from freqid.errors import StepTestError
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.second_order import SecondOrder
from freqid.step_test.steps import VoltageStep, find_steps

__all__ = ["exhibit_for"]

Floats = NDArray[np.float64]
IN_FREQUENCY = ("extra_pole", "hidden_exposure", "second_mode")
AGAINST_STEP_TEST = ("scale_error", "time_scale", "damping_differs", "operating_point")
N_BINS = 60
FEWEST_IN_BIN = 2


def exhibit_for(trial: Trial, trials: Trials, evidence: Evidence) -> Exhibit | None:
    """The picture for one fitted mechanism; None where the data for it are not at hand."""
    code, response = trial.mechanism.code, evidence.recorded.response
    if code in AGAINST_STEP_TEST and response is not None:
        return _gain_ratio(response, evidence.step.model, "gain by the frequency test over the step test's model")
    if code in IN_FREQUENCY and response is not None:
        return _gain_ratio(response, evidence.model.model, "measured gain over the second-order model's")
    if code == "drift":
        return _over_time(trial, trials, evidence.model.angle_unit)
    unit = evidence.model.angle_unit
    return _after_steps(trial, trials, unit) or _over_time(trial, trials, unit)


def _gain_ratio(response: FrequencyResponse, model: SecondOrder, title: str) -> Exhibit:
    size = np.abs(model.response(response.frequency))
    ratio = response.gain / size
    shown = np.isfinite(ratio) & (response.frequency > 0)
    frequency = response.frequency[shown]
    return Exhibit(
        title=title,
        x_label="frequency",
        x_unit="Hz",
        y_label="ratio",
        y_unit="",
        logarithmic=("x",),
        series=(
            Series(
                kind="points",
                source="frequency test",
                label="measured",
                x=frequency,
                y=ratio[shown],
                uncertainty=(response.coverage * response.gain_uncertainty / size)[shown],
            ),
            Series(kind="line", source="model", label="equal", x=frequency[[0, -1]], y=np.ones(2)),
        ),
    )


def _over_time(trial: Trial, trials: Trials, unit: str) -> Exhibit:
    """Averages of what is left over, and of what the mechanism would leave, against time."""
    i = int(np.argmax([float(np.var(r)) for r in trials.healthy.residuals]))
    test, left = trials.tests[i], trials.healthy.residuals[i]
    told = left - trial.fit.residuals[i]
    edges = np.linspace(test.time[0], test.time[-1], N_BINS + 1)
    return _picture(
        f"left over by a healthy rig in the {test.words}", ("time", "s"), unit, test, (test.time, left, told, edges)
    )


def _after_steps(trial: Trial, trials: Trials, unit: str) -> Exhibit | None:
    """All steps laid on one another; None without a step test."""
    for i, test in enumerate(trials.tests):
        steps = _steps(test) if test.kind == "step" else []
        if not steps:
            continue
        left = trials.healthy.residuals[i]
        told = left - trial.fit.residuals[i]
        length = float(np.median([s.plateau_stop - s.time for s in steps]))
        since, turned, told_turned = [], [], []
        for step in steps:
            inside = (test.time >= step.time) & (test.time < step.time + length)
            sign = math.copysign(1.0, step.change)
            since.append(test.time[inside] - step.time)
            turned.append(sign * left[inside])
            told_turned.append(sign * told[inside])
        edges = np.linspace(0.0, length, N_BINS + 1)
        return _picture(
            "left over by a healthy rig after a step, mean of all steps",
            ("time after the step", "s"),
            unit,
            test,
            (np.concatenate(since), np.concatenate(turned), np.concatenate(told_turned), edges),
        )
    return None


def _steps(test: RecordedTest) -> list[VoltageStep]:
    try:
        return find_steps(test.record.drive)
    except StepTestError:
        return []


def _picture(
    title: str, x: tuple[str, str], unit: str, test: RecordedTest, data: tuple[Floats, Floats, Floats, Floats]
) -> Exhibit:
    """Binned means of what is left over (points) and of what the mechanism tells (line)."""
    time, left, told, edges = data
    number = np.clip(np.searchsorted(edges, time, side="right") - 1, 0, N_BINS - 1)
    count = np.bincount(number, minlength=N_BINS)
    full = count >= FEWEST_IN_BIN
    divisor = np.maximum(count, 1)
    mean = np.bincount(number, weights=left, minlength=N_BINS) / divisor
    line = np.bincount(number, weights=told, minlength=N_BINS) / divisor
    scatter = float(np.std(left - told))
    centre = (edges[:-1] + edges[1:]) / 2
    source: SeriesSource = "frequency test" if test.kind == "response" else "step test"
    return Exhibit(
        title=title,
        x_label=x[0],
        x_unit=x[1],
        y_label="left over",
        y_unit=unit,
        series=(
            Series(
                kind="points",
                source=source,
                label="measured",
                x=centre[full],
                y=mean[full],
                uncertainty=1.96 * scatter / np.sqrt(divisor[full]),
            ),
            Series(kind="line", source="model", label="what the cause would leave", x=centre[full], y=line[full]),
        ),
    )
