"""Which frames belong to one step, and between which levels does it run?

The settled levels are means over the last third of the holds before and after it. Where a hold ends before the rig has
settled, the levels are those that the fitted model would settle at, with the uncertainty of the fit.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.motion import Motion
from freqid.second_order import SecondOrder
from freqid.step_test.reading import StepFrames
from freqid.step_test.steps import VoltageStep

__all__ = ["FEWEST_FRAMES_IN_A_HOLD", "damped_period", "frames_of_step"]

Floats = NDArray[np.float64]

FEWEST_FRAMES_IN_A_HOLD = 12
SETTLED_SHARE = 0.3  # of a hold, at its end, that is averaged for the settled level
SETTLED_TIME_CONSTANTS = 3.0  # a hold shorter than this many time constants is not settled
SETTLED_BEFORE = 2.0  # time constants before the step
REST_NUMBER = 5  # of the rest angle among the parameters of the motion


def frames_of_step(motion: Motion, step: VoltageStep, angle: Floats, noise: float) -> StepFrames | None:
    """Frames of the hold after `step` with the angles `angle` (N,), or None where it is too short to be read."""
    record, p = motion.record, motion.weighted.fit.parameters
    m = p.model
    # the exposure mean belongs to the middle of the exposure
    time = p.clock_ratio * record.stamp - m.delay - record.exposure / 2
    onset = step.time
    before = (time >= onset - SETTLED_SHARE * (onset - step.plateau_start)) & (time < onset - step.duration)
    hold = (time >= onset) & (time < step.plateau_stop)
    length = min(step.plateau_stop, float(time[-1])) - onset
    after = hold & (time >= onset + (1 - SETTLED_SHARE) * length)
    if hold.sum() < FEWEST_FRAMES_IN_A_HOLD or before.sum() < 3 or after.sum() < 3:
        return None
    settled = length >= SETTLED_TIME_CONSTANTS * m.slowest_decay
    came_from_rest = onset - step.plateau_start >= SETTLED_BEFORE * m.slowest_decay
    return StepFrames(
        time=time[hold] - onset,
        angle=angle[hold],
        before=_level(angle[before], noise) if came_from_rest else _fitted_level(motion, step.before),
        after=_level(angle[after], noise) if settled else _fitted_level(motion, step.after),
        voltage_change=step.change,
        noise=noise,
        period=damped_period(m),
        angle_unit=record.angle_unit,
        settled=settled and came_from_rest,
    )


def _level(angle: Floats, noise: float) -> tuple[float, float]:
    return float(np.mean(angle)), noise / float(np.sqrt(len(angle)))


def _fitted_level(motion: Motion, voltage: float) -> tuple[float, float]:
    """Where the fitted model settles at `voltage`, with the standard uncertainty of the fit."""
    fit, covariance = motion.weighted.fit, motion.weighted.covariance
    free, drive = list(fit.prediction.free), voltage - motion.record.drive.rest
    level = fit.parameters.rest_angle + fit.parameters.model.gain * drive
    slope = np.zeros(len(free))
    for number, change in ((0, drive), (REST_NUMBER, 1.0)):
        if number in free:
            slope[free.index(number)] = change
    return float(level), math.sqrt(max(float(slope @ covariance @ slope), 0.0))


def damped_period(m: SecondOrder) -> float:
    """Period of the damped oscillation; for a sluggish rig that of its natural frequency."""
    damped = np.sqrt(max(1 - m.damping_ratio**2, 0.25))
    return float(1 / (m.natural_frequency * damped))
