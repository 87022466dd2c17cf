"""What did the step test say? Read-offs per step and pooled, and the second-order model of the whole record.

All times count from the onset of the response (the step plus the delay); a log on another clock has no other zero.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from freqid.capture.clock_map import ClockMap
from freqid.derived import derived_quantities
from freqid.notebook_form import shown_by
from freqid.parameter_quantities import quantities_of
from freqid.quantity import Caveat, Quantity
from freqid.second_order import SecondOrder
from freqid.step_test.envelope import Decay, Extremes
from freqid.step_test.pooling import pool
from freqid.step_test.static_line import StaticLine

__all__ = ["STEP_QUANTITIES", "StepGroup", "StepReading", "StepResult"]

SAME_SIZE = 1.02

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

    `level` is the settled angle after it, `extremes` the swings about that; `parameters` are gain, natural frequency
    and damping ratio fitted to this step alone.
    """

    time: float
    voltage_before: float
    voltage_after: float
    quantities: dict[str, Quantity | None]
    level: Quantity | None = None
    extremes: Extremes | None = None
    parameters: dict[str, Quantity | None] = field(default_factory=dict)

    @property
    def size(self) -> float:
        """Change of the voltage without its sign, V."""
        return abs(self.voltage_after - self.voltage_before)

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
            "quantities": _plain(self.quantities),
            "level": None if self.level is None else self.level.as_json(),
            "extremes": None if self.extremes is None else self.extremes.as_json(),
            "parameters": _plain(self.parameters),
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class StepGroup:
    """Steps that belong together ("up", "down", "1.2 V"), with everything pooled over them."""

    group: str
    n_steps: int
    quantities: dict[str, Quantity | None]
    parameters: dict[str, Quantity | None]

    def as_json(self) -> dict[str, Any]:
        """One entry of "groups" in results/step.json."""
        return {
            "group": self.group,
            "n_steps": self.n_steps,
            "quantities": _plain(self.quantities),
            "parameters": _plain(self.parameters),
        }


def _plain(quantities: dict[str, Quantity | None]) -> dict[str, Any]:
    return {name: None if q is None else q.as_json() for name, q in quantities.items()}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepResult:
    """Pooled read-offs, every single step, and the fitted model with its covariance (4, 4) in `PARAMETER_ORDER`.

    `undetermined` names parameters the record does not determine. `decay` tells viscous from dry friction by the swings
    of all steps, `static_line` the gain and the hysteresis by their settled levels.
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
    decay: Decay | None = None
    static_line: StaticLine | None = None

    _repr_html_ = shown_by("step_html")

    @property
    def by_direction(self) -> tuple[StepGroup, ...]:
        """Steps up and steps down, each pooled."""
        return _groups([(step.direction, step) for step in self.steps])

    @property
    def by_amplitude(self) -> tuple[StepGroup, ...]:
        """Steps of one size pooled, smallest first; sizes within 2 % count as one."""
        named: list[tuple[str, StepReading]] = []
        last = 0.0
        for step in sorted(self.steps, key=lambda one: one.size):
            last = step.size if step.size > SAME_SIZE * last else last
            named.append((f"{last:.3g} V", step))
        return _groups(named)

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


def _groups(named: list[tuple[str, StepReading]]) -> tuple[StepGroup, ...]:
    """The steps of each name pooled, in the order the names first appear."""
    groups = []
    for name in dict.fromkeys(one for one, _ in named):
        members = [step for one, step in named if one == name]
        groups.append(
            StepGroup(
                group=name,
                n_steps=len(members),
                quantities=_pooled([step.quantities for step in members]),
                parameters=_pooled([step.parameters for step in members]),
            )
        )
    return tuple(groups)


def _pooled(rows: list[dict[str, Quantity | None]]) -> dict[str, Quantity | None]:
    names = dict.fromkeys(name for row in rows for name in row)
    return {name: pool([q for row in rows if (q := row.get(name)) is not None]) for name in names}
