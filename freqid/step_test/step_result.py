"""What did the step test say? Read-offs per step and pooled, and the second-order model of the whole record.

All times count from the onset of the response (the step plus the delay); a log on another clock has no other zero.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from freqid.capture.clock_map import ClockMap
from freqid.derived import derived_quantities
from freqid.notebook_form import shown_by
from freqid.parameter_quantities import quantities_of
from freqid.quantity import Caveat, Quantity
from freqid.second_order import SecondOrder

__all__ = ["STEP_QUANTITIES", "StepReading", "StepResult"]

STEP_QUANTITIES = (
    "percent_overshoot",
    "peak_time",
    "delay_time_50",
    "rise_time_0_90",
    "rise_time_10_90",
    "settling_time_5",
    "settling_time_2",
    "time_constant",
    "static_gain",
    "steady_state_error",
    "log_decrement",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class StepReading:
    """One step: when (s, input's clock), from and to which voltage (V), and what was read off it (None:
    undetermined).
    """

    time: float
    voltage_before: float
    voltage_after: float
    quantities: dict[str, Quantity | None]

    @property
    def direction(self) -> str:
        """ "up" or "down" in voltage."""
        return "up" if self.voltage_after > self.voltage_before else "down"

    def as_json(self) -> dict[str, Any]:
        """One entry of "steps" in results/step.json."""
        return {
            "time": self.time,
            "voltage_before": self.voltage_before,
            "voltage_after": self.voltage_after,
            "direction": self.direction,
            "quantities": {k: None if q is None else q.as_json() for k, q in self.quantities.items()},
        }


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepResult:
    """Pooled read-offs, every single step, and the fitted model with its covariance (4, 4) in `PARAMETER_ORDER`.

    `undetermined` names parameters the record does not determine.
    """

    quantities: dict[str, Quantity | None]
    steps: tuple[StepReading, ...]
    model: SecondOrder
    covariance: NDArray[np.float64]
    degrees_of_freedom: float
    angle_unit: str
    clock: ClockMap
    explained: float
    undetermined: tuple[str, ...] = ()
    caveats: tuple[Caveat, ...] = ()
    runs: tuple[str, ...] = ()

    _repr_html_ = shown_by("step_html")

    @property
    def parameters(self) -> dict[str, Quantity | None]:
        """The four parameters as quantities; None where undetermined."""
        return quantities_of(
            self.model,
            self.covariance,
            degrees_of_freedom=self.degrees_of_freedom,
            angle_unit=self.angle_unit,
            undetermined=self.undetermined,
        )

    @property
    def derived(self) -> dict[str, Quantity | None]:
        """Step and resonance quantities that the fitted model implies."""
        return derived_quantities(
            self.model.vector,
            self.covariance,
            angle_unit=self.angle_unit,
            degrees_of_freedom=self.degrees_of_freedom,
        )
