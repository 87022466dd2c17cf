"""Does the misfit have the shape that an extra pole or a zero leaves behind?

A driver's or coil's lag of time constant T multiplies the response by

    1 / (1 + s T) = exp(-s T) (1 + s^2 T^2 / 2 + ...)

The fitted delay takes up the first factor. Of s^2 G = K wn^2 - (terms in G and s G, which gain, natural frequency,
damping ratio and delay take up) there remains K wn^2 times the voltage itself: the misfit is the voltage fed straight
through, with coefficient

    c = K wn^2 T^2 / 2   (extra pole),      -K wn^2 T^2 / 2   (zero: 1 + s T)

so one column more, the voltage as the sensor would average it, tests for both on the whole record. Near an extra pole
at eight times the natural frequency it holds 92 to 99 % of what any test could find (`tests/benchmarks/adequacy.py`).

Source: score test (C. R. Rao 1948); L. Ljung, *System Identification*, 2nd ed. 1999, ch. 16 (validation against larger
structures).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.record import Record
from freqid.estimate.weighted_fit import WeightedFit, fit_column

__all__ = ["Feedthrough", "fit_feedthrough"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Feedthrough:
    """The voltage found in the misfit: `deviation` is its coefficient, positive for an extra pole, in standard
    uncertainties with `degrees_of_freedom`; `corner` (Hz) the pole or zero that would leave it; `shift` (4,) what
    allowing for it would change in the parameters (`PARAMETER_ORDER`).
    """

    deviation: float
    degrees_of_freedom: float
    corner: float
    shift: Floats

    @property
    def pole_p_value(self) -> float:
        """Chance of so much of an extra pole where there is none (one-sided)."""
        from scipy.special import stdtr

        return float(stdtr(self.degrees_of_freedom, -self.deviation))

    @property
    def zero_p_value(self) -> float:
        """Chance of so much of a zero where there is none (one-sided)."""
        from scipy.special import stdtr

        return float(stdtr(self.degrees_of_freedom, self.deviation))

    @property
    def structure(self) -> str:
        """Name of the structure that the sign points to."""
        return "extra pole" if self.deviation > 0 else "zero"


def fit_feedthrough(record: Record, weighted: WeightedFit) -> Feedthrough:
    """Fit the voltage, averaged as the sensor averages, to what the model left over, all parameters along."""
    p = weighted.fit.parameters
    m = p.model
    voltage = record.drive.mean(p.clock_ratio * record.stamp - m.delay, record.exposure * p.clock_ratio)
    found = fit_column(record, weighted, voltage)
    free = weighted.fit.prediction.free
    shift = np.zeros(4)
    kept = [i for i in range(4) if i in free]
    shift[kept] = found.shift[[free.index(i) for i in kept]]
    square = 2 * abs(found.coefficient) / max(abs(m.gain) * (2 * np.pi * m.natural_frequency) ** 2, 1e-300)
    sign = 1.0 if m.gain >= 0 else -1.0
    return Feedthrough(
        deviation=sign * found.coefficient / max(found.standard_uncertainty, 1e-300),
        degrees_of_freedom=found.degrees_of_freedom,
        corner=float(1 / (2 * np.pi * np.sqrt(max(square, 1e-300)))),
        shift=shift,
    )
