"""What of a step run is to be shown, on which time axis, and what does the frequency-response model predict for it?

Time counts from the onset of the response as the step test found it (the step plus its fitted lag), so that a log on
another clock needs no zero in common. The angle of each frame stands at the middle of its exposure; predictions are
averaged over the same exposure and are exact for the voltage as held (`freqid.held_response`).

The band is the 95 % interval of the prediction: the covariance of gain, natural frequency and damping ratio of the
frequency test carried through that response by central differences (JCGM 100:2008, 5.1.3 and 5.2.2). Its delay joins
in where the rig's own delay is known on both sides; otherwise the onsets are laid on each other.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.identification import Identification
from freqid.estimate.record import Record
from freqid.held_response import Drive, HeldResponse
from freqid.quantity import coverage_factor
from freqid.records import Run
from freqid.second_order import SecondOrder
from freqid.step_test.step_result import StepReading, StepResult

__all__ = ["PredictedStep", "StepView", "chosen_steps", "predicted_step", "step_view"]

Floats = NDArray[np.float64]

_BEFORE = 0.15  # of what is shown after the onset
_CURVE_POINTS = 500
_DIFFERENCE = 0.1  # of a standard uncertainty: the response is straight over it, rounding far below


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepView:
    """One step: samples (N,) at `time` (s from the onset, mid-exposure) and `angle` from the angle at rest.

    `start`, `final` are the levels by the step test's model, `stop` the end stops to either side of rest, `span` the
    time axis; `exposure` in s of the drive's clock.
    """

    reading: StepReading
    time: Floats
    angle: Floats
    start: float
    final: float
    exposure: float
    onset: float
    drive: Drive
    span: tuple[float, float]
    angle_unit: str


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PredictedStep:
    """Predicted angle (M,) from rest at `time` (M,), and half the width of its 95 % interval."""

    time: Floats
    angle: Floats
    half: Floats


def chosen_steps(result: StepResult) -> tuple[StepReading, ...]:
    """The clearest step up and the clearest down: most quantities read off, then the largest, then the first."""

    def clearness(step: StepReading) -> tuple[int, float, float]:
        read = sum(quantity is not None for quantity in step.quantities.values())
        return read, round(abs(step.voltage_after - step.voltage_before), 9), -step.time

    ways = ([s for s in result.steps if s.direction == way] for way in ("up", "down"))
    return tuple(max(steps, key=clearness) for steps in ways if steps)


def step_view(run: Run, result: StepResult, reading: StepReading) -> StepView:
    """The part of the step run about `reading`, in time from the onset and angle from rest."""
    record = Record.from_run(run)
    ratio = 1.0 if run.common_clock else 1 + result.clock.ratio_ppm.value * 1e-6
    lag = _onset_lag(result)
    exposure = ratio * record.exposure
    end = ratio * record.stamp - lag  # of the exposure, in time since which the voltage acts
    rest = _rest_angle(record, end, exposure, result.model)
    time = end - exposure / 2 - reading.time
    span = _span(result, reading)
    seen = (time >= span[0]) & (time <= span[1])
    gain = result.model.gain
    start = gain * (reading.voltage_before - record.drive.rest)
    return StepView(
        reading=reading,
        time=time[seen],
        angle=record.angle[seen] - rest,
        start=start,
        final=start + gain * (reading.voltage_after - reading.voltage_before),
        exposure=exposure,
        onset=reading.time,
        drive=record.drive,
        span=span,
        angle_unit=run.angle.angle_unit,
    )


def predicted_step(view: StepView, identification: Identification, result: StepResult, time: Floats) -> PredictedStep:
    """What the frequency-response model predicts at `time` (M,) s from the onset."""
    found = identification.model
    same_zero = found.clock.offset_known and result.clock.offset_known
    later = found.model.delay - _onset_lag(result) if same_zero else 0.0
    model = replace(found.model, delay=later)
    covariance = found.covariance.copy()
    if not same_zero:
        covariance[3, :] = covariance[:, 3] = 0.0
    deviations = np.sqrt(np.diag(covariance))
    columns = [_slope(view, model, number, float(u), time) for number, u in enumerate(deviations)]
    jacobian = np.stack(columns, axis=1)
    variance = np.maximum(np.einsum("ni,ij,nj->n", jacobian, covariance, jacobian), 0.0)
    return PredictedStep(
        time=time,
        angle=_motion(view, model, time),
        half=coverage_factor(found.degrees_of_freedom) * np.sqrt(variance),
    )


def curve_times(view: StepView) -> Floats:
    """Instants (M,) that show the motion smoothly across the view."""
    return np.linspace(*view.span, _CURVE_POINTS)


def _motion(view: StepView, model: SecondOrder, time: Floats) -> Floats:
    response = HeldResponse(view.drive, model.natural_frequency, model.damping_ratio)
    return model.gain * response.mean(time + view.onset + view.exposure / 2 - model.delay, view.exposure)


def _slope(view: StepView, model: SecondOrder, number: int, deviation: float, time: Floats) -> Floats:
    """Derivative of the motion by one parameter, by central differences; zero where it has no uncertainty."""
    if deviation == 0:
        return np.zeros_like(time)
    step = _DIFFERENCE * deviation
    if number in (1, 2):
        step = min(step, 0.3 * float(model.vector[number]))  # frequency and damping ratio stay positive
    change = np.zeros(4)
    change[number] = step
    ahead = _motion(view, SecondOrder.from_vector(model.vector + change), time)
    back = _motion(view, SecondOrder.from_vector(model.vector - change), time)
    return (ahead - back) / (2 * step)


def _onset_lag(result: StepResult) -> float:
    return result.clock.lag.value if not result.clock.offset_known else result.model.delay


def _rest_angle(record: Record, end: Floats, exposure: float, model: SecondOrder) -> float:
    """The reading at rest: what the step test's own model leaves over, in the middle (median) of the record."""
    response = HeldResponse(record.drive, model.natural_frequency, model.damping_ratio)
    return float(np.median(record.angle - model.gain * response.mean(end, exposure)))


def _span(result: StepResult, reading: StepReading) -> tuple[float, float]:
    """From shortly before the onset until settled and a little longer, but not into the next step."""
    later = [step.time for step in result.steps if step.time > reading.time + 1e-9]
    hold = min(later) - reading.time if later else np.inf
    settled = result.derived.get("settling_time_2")
    wanted = 1.35 * settled.value if settled is not None else 6 * result.model.slowest_decay
    after = float(min(wanted, 0.98 * hold))
    return -_BEFORE * after, after
