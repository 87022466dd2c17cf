"""What is the rig, in four numbers? The fitted model with its joint uncertainty and its limits of validity.

`delay` contains the offset between the clocks (delay - offset) where that is unknown. Intervals are from Student's t
with `degrees_of_freedom` of the noise estimate.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from freqid.capture.clock_map import ClockMap
from freqid.derived import derived_quantities
from freqid.notebook_form import shown_by
from freqid.parameter_quantities import quantities_of
from freqid.quantity import Caveat, Quantity
from freqid.second_order import SecondOrder

if TYPE_CHECKING:
    from freqid.estimate.amplitude_dependence import AmplitudeDependence
    from freqid.estimate.distortion_summary import DistortionSummary
    from freqid.estimate.measured_amplitude import MeasuredAmplitude

__all__ = ["Adequacy", "IdentifiedModel"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Adequacy:
    """Lack-of-fit test of the model against the measured variances.

    `statistic` is chi-square distributed with `degrees_of_freedom` where the model is true. `better_structure` names a
    structure that does better, if one was found.
    """

    statistic: float
    degrees_of_freedom: int
    p_value: float
    better_structure: str | None = None

    @property
    def adequate(self) -> bool:
        """Whether the misfit is what noise alone would give (5 % false alarms)."""
        return self.p_value >= 0.05


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class IdentifiedModel:
    """Model, joint covariance (4, 4) in `PARAMETER_ORDER` (gain in angle unit per V, Hz, 1, s), and what it rests on.

    `amplitude` is that of the measurement, `dependence` how several runs depend on it, `distortion` what is known of
    nonlinear distortion around the resonance.
    """

    model: SecondOrder
    covariance: NDArray[np.float64]
    degrees_of_freedom: float
    angle_unit: str
    adequacy: Adequacy
    clock: ClockMap
    explained: float
    caveats: tuple[Caveat, ...] = ()
    undetermined: tuple[str, ...] = ()
    runs: tuple[str, ...] = ()
    settings: dict[str, Any] = field(default_factory=dict)
    amplitude: MeasuredAmplitude | None = None
    dependence: AmplitudeDependence | None = None
    distortion: tuple[DistortionSummary, ...] = ()

    _repr_html_ = shown_by("model_html")

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
        """Step and resonance quantities that the model implies; times count from the onset of the response."""
        return derived_quantities(
            self.model.vector,
            self.covariance,
            angle_unit=self.angle_unit,
            degrees_of_freedom=self.degrees_of_freedom,
        )
