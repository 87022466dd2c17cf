"""What does each step say for itself? Gain, natural frequency and damping ratio fitted to its hold alone.

One Gauss-Newton step from the fit of the whole record, over the frames of the hold: with the derivatives J of the
whole-record fit (the motion before the step is in them) and what that fit left over, r,

    deviation of the parameters = (J'J)^-1 J'r

in gain, natural frequency, damping ratio, delay and a level of its own. So a parameter that changes with the amplitude
or the direction shows, to first order in its change.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from freqid.estimate.motion import Motion
from freqid.quantity import Quantity
from freqid.second_order import PARAMETER_ORDER, parameter_units
from freqid.step_test.steps import VoltageStep

__all__ = ["step_parameters"]

FEWEST_FRAMES = 12
MOST_UNCERTAIN = 0.5  # relative: beyond it the hold alone does not determine the parameter
SHOWN = ("gain", "natural_frequency", "damping_ratio")


def step_parameters(motion: Motion, noise: float) -> Callable[[VoltageStep], dict[str, Quantity | None]]:
    """A function that gives the parameters of one step of the record; None for those its hold does not determine."""
    record, fit = motion.record, motion.weighted.fit
    p, free = fit.parameters, list(fit.prediction.free)
    time = p.clock_ratio * record.stamp - p.model.delay - record.exposure / 2
    columns = [free.index(number) for number in range(4) if number in free]
    names = [PARAMETER_ORDER[number] for number in range(4) if number in free]
    jacobian, units = fit.prediction.jacobian[:, columns], parameter_units(record.angle_unit)

    def alone(step: VoltageStep) -> dict[str, Quantity | None]:
        hold = (time >= step.time) & (time < step.plateau_stop)
        nothing: dict[str, Quantity | None] = dict.fromkeys(SHOWN)
        if np.sum(hold) < FEWEST_FRAMES:
            return nothing
        design = np.column_stack([jacobian[hold], np.ones(int(np.sum(hold)))])
        scale = np.maximum(np.linalg.norm(design, axis=0), 1e-150)
        inverse = np.linalg.pinv((design / scale).T @ (design / scale), rcond=1e-12, hermitian=True)
        moved = inverse @ ((design / scale).T @ fit.residual[hold]) / scale
        deviation = noise * np.sqrt(np.diag(inverse)) / scale
        found = nothing
        for index, name in enumerate(names):
            value = float(getattr(p.model, name)) + float(moved[index])
            known = name in SHOWN and deviation[index] < MOST_UNCERTAIN * abs(value)
            if known:
                found[name] = Quantity.normal(value, units[name], float(deviation[index]))
        return found

    return alone
