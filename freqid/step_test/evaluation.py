"""From one run to the step-test values: every step read off, all pooled, and the model of the whole record.

The model (least squares at the true instants, as for the frequency test) gives the parameters; the read-offs come from
the
record itself, the model lends them only the onset and the width of the smoothing window. Pooling weighs each step by
its own uncertainty; the pooled uncertainty is the larger of what the weights say and what the scatter says.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from freqid.derived import decrement_quantity, derived_quantities
from freqid.errors import StepTestError
from freqid.estimate.identification import clock_caveats, clock_map
from freqid.estimate.motion import Motion, estimate_motion, parameter_covariance
from freqid.estimate.record import Record
from freqid.quantity import Caveat, Quantity
from freqid.records import Run
from freqid.second_order import SecondOrder
from freqid.step_relations import logarithmic_decrement
from freqid.step_test.envelope import fit_decay
from freqid.step_test.hold_frames import FEWEST_FRAMES_IN_A_HOLD, damped_period, frames_of_step
from freqid.step_test.pooling import pool
from freqid.step_test.reading import StepFrames, read_extremes, read_step
from freqid.step_test.single_steps import step_parameters
from freqid.step_test.smooth_curve import HALF_WIDTH_IN_PERIODS
from freqid.step_test.static_line import StaticLine, fit_static_line
from freqid.step_test.step_result import STEP_QUANTITIES, StepReading, StepResult
from freqid.step_test.steps import VoltageStep, find_steps

__all__ = ["evaluate_steps"]

Floats = NDArray[np.float64]

FRAMES_PER_PERIOD = 8
LONGEST_STEP = 0.1  # of a period: a longer change of the voltage is a ramp


def evaluate_steps(run: Run) -> StepResult:
    """Evaluate every step of a run; raises StepTestError where there is none, EstimationError where nothing fits.

    Examples
    --------
    >>> import numpy as np
    >>> from freqid import InputStream, SecondOrder, SimulatedRig, SimulatedSensor
    >>> vane = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
    >>> rig = SimulatedRig(model=vane, sensor=SimulatedSensor(sample_rate=60.0, exposure=0.004, noise=0.1))
    >>> time = np.arange(0, 12, 0.01)
    >>> steps = InputStream(time=time, voltage=1.0 * (time % 6 >= 3), hold="zero-order", commanded=True)
    >>> run = rig.run(steps, kind="step", name="step-001", rng=np.random.default_rng(1))
    >>> found = evaluate_steps(run)
    >>> round(found.quantities["percent_overshoot"].value), round(found.parameters["damping_ratio"].value, 2)
    (69, 0.12)
    """
    record = Record.from_run(run)
    steps = find_steps(record.drive)
    motion = estimate_motion(record)
    record, weighted = motion.record, motion.weighted
    model = weighted.fit.parameters.model
    noise = float(np.sqrt(weighted.fit.sum_of_squares / weighted.fit.degrees_of_freedom))
    readings, caveats = [], [*record.caveats, *motion.caveats]
    exact = _exact(motion, record.angle_unit)
    alone = step_parameters(motion, noise)
    unsettled = 0
    for step in steps:
        frames = frames_of_step(motion, step, record.angle, noise)
        smooth = frames_of_step(motion, step, weighted.fit.prediction.angle, noise)
        if frames is not None and smooth is not None:
            readings.append(replace(_reading(frames, smooth, step, exact, motion), parameters=alone(step)))
            unsettled += not frames.settled
    if not readings:
        raise StepTestError(
            f"{run.name}: {len(steps)} steps, but none is held for {FEWEST_FRAMES_IN_A_HOLD} frames: hold each level "
            f"longer"
        )
    quantities, more = _pooled(readings, motion, record)
    more += _step_caveats(steps, unsettled, model)
    return StepResult(
        quantities=quantities,
        steps=tuple(readings),
        model=model,
        covariance=parameter_covariance(weighted),
        degrees_of_freedom=weighted.degrees_of_freedom,
        angle_unit=record.angle_unit,
        clock=clock_map(run, motion),
        explained=weighted.fit.explained,
        undetermined=motion.undetermined,
        caveats=(*caveats, *more, *clock_caveats(record)),
        runs=(run.name,),
        decay=fit_decay([r.extremes for r in readings if r.extremes is not None], angle_unit=record.angle_unit),
        static_line=_static_line(readings, record.angle_unit),
    )


def _step_caveats(steps: list[VoltageStep], unsettled: int, model: SecondOrder) -> list[Caveat]:
    """What is not as a step test should be: holds that end too soon, ramps in place of steps."""
    told = []
    if unsettled:
        told.append(
            Caveat(
                "unfinished_settling",
                f"{unsettled} of {len(steps)} steps were not held until the rig had settled (3 time constants of "
                f"{model.slowest_decay:.3g} s): their levels are those of the fitted model; hold each level longer.",
            )
        )
    longest = max(step.duration for step in steps)
    if longest > LONGEST_STEP * damped_period(model):
        told.append(
            Caveat(
                "ramp_instead_of_step",
                f"The voltage takes up to {longest:.3g} s to change, {longest / damped_period(model):.2g} periods of "
                "the rig: the fit uses it as it is; what was read off is corrected by the fitted model and counts from "
                "the middle of the change.",
            )
        )
    return told


def _static_line(readings: list[StepReading], angle_unit: str) -> StaticLine | None:
    settled = [(r.voltage_after, r.level, r.direction == "up") for r in readings if r.level is not None]
    return fit_static_line(
        np.array([voltage for voltage, _, _ in settled]),
        np.array([level.value for _, level, _ in settled]),
        np.array([level.standard_uncertainty for _, level, _ in settled]),
        np.array([up for _, _, up in settled], dtype=bool),
        angle_unit=angle_unit,
    )


def _exact(motion: Motion, angle_unit: str) -> dict[str, float]:
    """What the fitted model shows exactly, by the names of the read-offs."""
    model = motion.weighted.fit.parameters.model
    derived = derived_quantities(model.vector, parameter_covariance(motion.weighted), angle_unit=angle_unit)
    exact = {name: q.value for name, q in derived.items() if q is not None and name in STEP_QUANTITIES}
    if model.damping_ratio < 1:
        exact["log_decrement"] = float(logarithmic_decrement(model.damping_ratio))
    exact["static_gain"] = model.gain
    return exact


def _reading(
    frames: StepFrames, smooth: StepFrames, step: VoltageStep, exact: dict[str, float], motion: Motion
) -> StepReading:
    """Read a step, and correct what the same reading of the noise-free model at the same frames gets wrong.

    A quarter of the correction goes into the uncertainty: it rests on the model.
    """
    half_width = HALF_WIDTH_IN_PERIODS * frames.period
    quantities = read_step(frames, half_width=half_width)
    for name, ideal in read_step(smooth, half_width=half_width).items():
        found = quantities[name]
        if found is not None and ideal is not None and name in exact:
            bias = ideal.value - exact[name]
            u = float(np.hypot(found.standard_uncertainty, bias / 4))
            if abs(bias) < 0.5 * abs(exact[name]) and (found.value - bias) * found.value > 0:
                quantities[name] = Quantity.normal(found.value - bias, found.unit, u)
    model = motion.weighted.fit.parameters.model
    p = motion.weighted.fit.parameters
    rest_voltage = motion.record.drive.rest
    predicted = p.rest_angle + model.gain * (step.after - rest_voltage)
    error = Quantity.normal(frames.after[0] - predicted, frames.angle_unit, frames.after[1])
    quantities["steady_state_error"] = error if frames.settled else None
    return StepReading(
        time=step.time,
        voltage_before=step.before,
        voltage_after=step.after,
        quantities={name: quantities.get(name) for name in STEP_QUANTITIES},
        level=Quantity.normal(frames.after[0], frames.angle_unit, frames.after[1]) if frames.settled else None,
        extremes=read_extremes(frames, half_width=half_width),
    )


def _pooled(
    readings: list[StepReading], motion: Motion, record: Record
) -> tuple[dict[str, Quantity | None], list[Caveat]]:
    pooled: dict[str, Quantity | None] = {}
    caveats: list[Caveat] = []
    model = motion.weighted.fit.parameters.model
    frames_per_period = damped_period(model) / record.frame_interval
    coarse = frames_per_period < FRAMES_PER_PERIOD
    between = _between_frames(motion, record.angle_unit) if coarse else {}
    timed = {"percent_overshoot", "peak_time", "delay_time_50", "rise_time_0_90", "rise_time_10_90", "log_decrement"}
    for name in STEP_QUANTITIES:
        values = [q for r in readings if (q := r.quantities[name]) is not None]
        if coarse and name in timed:
            pooled[name] = between.get(name)
            caveats.append(
                Caveat(
                    "too_few_frames",
                    f"The {_words(name)} lies between the frames: {frames_per_period:.1f} frames per period, "
                    f"{FRAMES_PER_PERIOD} are needed to read it off; the value is that of the fitted model.",
                )
            )
            continue
        pooled[name] = _possible(name, pool(values))
        if pooled[name] is None:
            caveats.append(Caveat(f"no_{name}", _why_missing(name, model)))
    return pooled, caveats


def _between_frames(motion: Motion, angle_unit: str) -> dict[str, Quantity | None]:
    """What the fitted model says of the response between too few frames, with its uncertainty."""
    model, covariance = motion.weighted.fit.parameters.model, parameter_covariance(motion.weighted)
    freedom = motion.weighted.degrees_of_freedom
    found = derived_quantities(model.vector, covariance, angle_unit=angle_unit, degrees_of_freedom=freedom)
    found["log_decrement"] = decrement_quantity(model.vector, covariance, degrees_of_freedom=freedom)
    return found


def _possible(name: str, quantity: Quantity | None) -> Quantity | None:
    """An overshoot is not negative, and neither is its interval."""
    if name != "percent_overshoot" or quantity is None or quantity.interval_95[0] >= 0:
        return quantity
    return replace(quantity, value=max(quantity.value, 0.0), interval_95=(0.0, max(quantity.interval_95[1], 0.0)))


def _why_missing(name: str, model: SecondOrder) -> str:
    missing = f"The {_words(name)} was not read off"
    if name in ("peak_time", "log_decrement", "time_constant") and model.damping_ratio > 0.4:
        return f"{missing}: too few swings stand clear of the noise (damping ratio {model.damping_ratio:.2g})."
    if name.startswith("settling"):
        return f"{missing}: the noise is as wide as the band, or the angle had not settled; see the fitted model."
    return f"{missing}: no step shows it clearly; see the fitted model."


def _words(name: str) -> str:
    """ "settling_time_5" as "settling time (5 %)", "rise_time_10_90" as "rise time (10-90 %)"."""
    head, _, figures = name.partition("_time_")
    if not figures or head not in ("settling", "rise", "delay"):
        return name.replace("_", " ")
    return f"{head} time ({figures.replace('_', '-')} %)"
