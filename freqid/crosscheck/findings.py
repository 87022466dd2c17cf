"""What does one test say, whichever kind it is? The common form in which any two results are compared.

A frequency test measures the resonance and implies the step's times; a step test measures the times and implies the
resonance; an old sheet gives a few numbers. `measured` holds what was read off directly, `implied` what follows from
the fitted model. Times count from the onset of the response.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from freqid.derived import decrement_quantity, derived_quantities, settling_quantity
from freqid.estimate.model import IdentifiedModel
from freqid.estimate.resonance import ResonanceReading
from freqid.quantity import Quantity
from freqid.resonance_relations import half_power_width_ratio
from freqid.second_order import SecondOrder
from freqid.step_test.step_result import StepResult

__all__ = ["Findings", "TestKind", "findings_of_model", "findings_of_step", "half_power_width"]

TestKind = str
Floats = NDArray[np.float64]
RESONANCE = ("resonance_frequency", "resonance_gain", "half_power_width")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Findings:
    """One result: its parameters with their covariance, what it measured, what it implies, and how it is called.

    `vector` (4,) and `covariance` (4, 4) stand in `PARAMETER_ORDER`; a parameter that is None in `parameters` has no
    meaning there. `silence` says, by quantity, why one was not measured. `recorded_time` and `folder` serve the
    proposal of a longer test.
    """

    label: str
    kind: TestKind  # "frequency test", "step test" or "typed values"
    parameters: Mapping[str, Quantity | None]
    vector: Floats
    covariance: Floats
    degrees_of_freedom: float
    angle_unit: str
    offset_known: bool
    measured: Mapping[str, Quantity | None]
    implied: Mapping[str, Quantity | None]
    silence: Mapping[str, str] = field(default_factory=dict)
    recorded_time: float = 0.0  # s; 0 for what cannot be repeated
    folder: str = "FOLDER"

    def shown(self, name: str) -> Quantity | None:
        """The quantity as it was measured, else as the model implies it; None where neither."""
        found = self.measured.get(name)
        return self.implied.get(name) if found is None and name not in self.measured else found

    def knows(self, name: str) -> bool:
        """Whether this kind of result speaks of the quantity at all."""
        return name in self.measured or name in self.implied

    def settling_time(self, band: float) -> Quantity | None:
        """Settling time (s, from the onset) to within ± `band` of the final value, by the fitted model."""
        if self.parameters.get("natural_frequency") is None or self.parameters.get("damping_ratio") is None:
            return None
        return settling_quantity(self.vector, self.covariance, band, degrees_of_freedom=self.degrees_of_freedom)


def findings_of_model(
    model: IdentifiedModel, resonance: ResonanceReading | str, *, label: str = "frequency test", folder: str = "FOLDER"
) -> Findings:
    """A frequency test: measured is the peak of the curve (or `resonance` says why there is none)."""
    reading: dict[str, Quantity | None] = dict.fromkeys(RESONANCE)
    silence = dict.fromkeys(RESONANCE, resonance) if isinstance(resonance, str) else {}
    if not isinstance(resonance, str):
        reading = {name: getattr(resonance, name) for name in RESONANCE}
    return Findings(
        label=label,
        kind="frequency test",
        parameters=model.parameters,
        vector=model.model.vector,
        covariance=model.covariance,
        degrees_of_freedom=model.degrees_of_freedom,
        angle_unit=model.angle_unit,
        offset_known=model.clock.offset_known,
        measured=reading,
        implied=_implied(model.model, model.covariance, model.degrees_of_freedom, model.angle_unit, model.parameters),
        silence=silence,
        recorded_time=model.clock.frames * model.clock.frame_interval,
        folder=folder,
    )


def findings_of_step(step: StepResult, *, label: str = "step test", folder: str = "FOLDER") -> Findings:
    """A step test: measured are the pooled read-offs."""
    missing = dict.fromkeys(step.quantities, "not read off the steps")
    return Findings(
        label=label,
        kind="step test",
        parameters=step.parameters,
        vector=step.model.vector,
        covariance=step.covariance,
        degrees_of_freedom=step.degrees_of_freedom,
        angle_unit=step.angle_unit,
        offset_known=step.clock.offset_known,
        measured=step.quantities,
        implied=_implied(step.model, step.covariance, step.degrees_of_freedom, step.angle_unit, step.parameters),
        silence=missing,
        recorded_time=step.clock.frames * step.clock.frame_interval,
        folder=folder,
    )


def half_power_width(
    model: SecondOrder, covariance: Floats, *, degrees_of_freedom: float = float("inf")
) -> Quantity | None:
    """Half-power width (Hz) that natural frequency and damping ratio imply, with uncertainty; None where the curve has
    none.
    """
    fn, zeta = model.natural_frequency, model.damping_ratio
    width = float(half_power_width_ratio(zeta)) * fn
    if not np.isfinite(width):
        return None
    h = 1e-4 * zeta
    by_zeta = (float(half_power_width_ratio(zeta + h)) - float(half_power_width_ratio(zeta - h))) / (2 * h) * fn
    slope = np.array([width / fn, by_zeta])
    u = float(np.sqrt(slope @ covariance[1:3, 1:3] @ slope))
    return Quantity.finite_or_none(width, "Hz", u, degrees_of_freedom)


def _implied(
    model: SecondOrder,
    covariance: Floats,
    degrees_of_freedom: float,
    angle_unit: str,
    parameters: Mapping[str, Quantity | None],
) -> dict[str, Quantity | None]:
    implied = derived_quantities(
        model.vector, covariance, angle_unit=angle_unit, degrees_of_freedom=degrees_of_freedom
    )
    implied["half_power_width"] = half_power_width(model, covariance, degrees_of_freedom=degrees_of_freedom)
    implied["static_gain"] = parameters["gain"]
    implied["log_decrement"] = decrement_quantity(
        model.vector, covariance, degrees_of_freedom=degrees_of_freedom
    )
    if parameters["gain"] is None:
        implied["resonance_gain"] = None
    return implied
