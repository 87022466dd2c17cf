"""What is the measured frequency response, and how sure is each point of it?

`response` is angle over voltage, exp(+j 2 pi f t), corrected for hold and exposure, phase as recorded (so
an unknown clock offset is still in it). `variance` is E|error|^2 of the complex value, equal in both directions
(circular); hence u(|G|) = u(arg G) |G| = sqrt(variance / 2).
Source: Pintelon & Schoukens, *System Identification*, 2nd ed. 2012, ch. 2 and 4.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from freqid.quantity import Caveat, coverage_factor, in_unit

__all__ = ["FrequencyResponse"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FrequencyResponse:
    """Response at `frequency` (F,), ascending; all arrays share that shape.

    `noise` is the amplitude of a sine as large as the noise of one line (rms times sqrt 2, angle unit),
    `input_amplitude` that of the voltage at the line and `input_phase` its phase on the input's clock (None for a
    voltage without lines); `coherence` is the share of the recorded power at the line that the input explains.
    `nonlinear` is the amplitude of the nonlinear distortion that comes and goes with the phases of the excitation and
    that `variance` contains beside the noise, None where none is known. `degrees_of_freedom` belongs to `variance`.
    `method` is "periodic" or "local-polynomial".
    """

    frequency: Floats = in_unit("Hz")
    response: NDArray[np.complex128] = in_unit("angle_unit/V")
    variance: Floats = in_unit("(angle_unit/V)^2")
    coherence: Floats = in_unit("1")
    noise: Floats = in_unit("angle_unit")
    input_amplitude: Floats = in_unit("V")
    degrees_of_freedom: Floats = in_unit("1")
    nonlinear: Floats | None = field(default=None, metadata={"unit": "angle_unit"})
    input_phase: Floats | None = field(default=None, metadata={"unit": "rad"})
    angle_unit: str
    method: str
    caveats: tuple[Caveat, ...] = ()

    @property
    def gain(self) -> Floats:
        """|angle| / |voltage| in angle unit per V."""
        return np.abs(self.response)

    @property
    def gain_uncertainty(self) -> Floats:
        """Standard uncertainty of `gain`."""
        return np.asarray(np.sqrt(self.variance / 2))

    @property
    def phase(self) -> Floats:
        """Unwrapped phase in degrees, negative where the angle lags."""
        return np.asarray(np.degrees(np.unwrap(np.angle(self.response))))

    @property
    def phase_uncertainty(self) -> Floats:
        """Standard uncertainty of `phase` in degrees (linear, at most 104 degrees = uniform over a turn)."""
        relative = self.gain_uncertainty / np.maximum(self.gain, 1e-300)
        return np.asarray(np.minimum(np.degrees(relative), 360 / np.sqrt(12)))

    @property
    def coverage(self) -> Floats:
        """Factor from standard uncertainty to half a 95 % interval, line by line (Student's t)."""
        return np.array([coverage_factor(float(v)) for v in self.degrees_of_freedom])

    @property
    def noise_variance(self) -> Floats:
        """The part of `variance` that is noise: less the nonlinear distortion, where that is known."""
        if self.nonlinear is None:
            return self.variance
        return np.asarray(self.variance * self.noise**2 / np.maximum(self.noise**2 + self.nonlinear**2, 1e-300))

    def without_delay(self, delay: float) -> NDArray[np.complex128]:
        """Response with a delay of `delay` seconds taken out, for showing the phase of a lagging log."""
        return np.asarray(self.response * np.exp(2j * np.pi * self.frequency * delay))
