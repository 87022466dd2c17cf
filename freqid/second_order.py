"""What is the model? A second-order rig with a delay.

    G(s) = K wn^2 exp(-s tau) / (s^2 + 2 zeta wn s + wn^2),   wn = 2 pi fn,   exp(+j 2 pi f t)

tau > 0: the angle comes later. zeta >= 1 is allowed, K < 0 is a reversed sensor. This module knows
the frequency domain only; `freqid.held_response` answers in time.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["PARAMETER_ORDER", "SecondOrder", "parameter_units"]

PARAMETER_ORDER = ("gain", "natural_frequency", "damping_ratio", "delay")


def parameter_units(angle_unit: str) -> dict[str, str]:
    """Units of the four parameters, in `PARAMETER_ORDER`."""
    return dict(zip(PARAMETER_ORDER, (f"{angle_unit}/V", "Hz", "1", "s"), strict=True))


@dataclass(frozen=True, slots=True, kw_only=True)
class SecondOrder:
    """Gain in angle unit per V, natural frequency in Hz, damping ratio, delay in s.

    Raises ValueError where natural frequency or damping ratio is not positive.

    Examples
    --------
    >>> vane = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
    >>> [round(float(abs(gain)), 3) for gain in vane.response([0.0, 3.0])]  # at rest, and at the natural frequency
    [12.0, 50.0]
    """

    gain: float
    natural_frequency: float
    damping_ratio: float
    delay: float = 0.0

    def __post_init__(self) -> None:
        if not (self.natural_frequency > 0 and self.damping_ratio > 0):
            raise ValueError(
                f"natural frequency and damping ratio must be positive, not "
                f"{self.natural_frequency=} Hz, {self.damping_ratio=}"
            )

    @property
    def vector(self) -> NDArray[np.float64]:
        """The four parameters in `PARAMETER_ORDER`, shape (4,)."""
        return np.array([self.gain, self.natural_frequency, self.damping_ratio, self.delay])

    @classmethod
    def from_vector(cls, vector: ArrayLike) -> SecondOrder:
        """Back from `vector`."""
        gain, natural_frequency, damping_ratio, delay = (float(v) for v in np.asarray(vector))
        return cls(gain=gain, natural_frequency=natural_frequency, damping_ratio=damping_ratio, delay=delay)

    def response(self, frequency: ArrayLike) -> NDArray[np.complex128]:
        """Frequency response in angle unit per V at `frequency` (F,) Hz: complex (F,)."""
        f = np.asarray(frequency, dtype=float)
        x = f / self.natural_frequency
        undelayed = self.gain / (1 - x**2 + 2j * self.damping_ratio * x)
        shift = np.exp(-2j * np.pi * f * self.delay) if self.delay else 1.0  # costs more than all else
        return np.asarray(undelayed * shift, dtype=complex)

    def sensitivity(self, frequency: ArrayLike) -> NDArray[np.complex128]:
        """Derivatives of `response` with respect to the four parameters, complex (F, 4)."""
        f = np.asarray(frequency, dtype=float)
        x = f / self.natural_frequency
        denominator = 1 - x**2 + 2j * self.damping_ratio * x
        unit = np.exp(-2j * np.pi * f * self.delay) / denominator
        response = self.gain * unit
        slope = (2 * x**2 - 2j * self.damping_ratio * x) / self.natural_frequency
        by_natural_frequency = -response * slope / denominator
        by_damping_ratio = -response * 2j * x / denominator
        by_delay = -2j * np.pi * f * response
        return np.stack([unit, by_natural_frequency, by_damping_ratio, by_delay], axis=-1)

    @property
    def poles(self) -> tuple[complex, complex]:
        """The two poles in rad/s."""
        wn = 2 * math.pi * self.natural_frequency
        root = cmath.sqrt(self.damping_ratio**2 - 1)
        return wn * (-self.damping_ratio + root), wn * (-self.damping_ratio - root)

    @property
    def slowest_decay(self) -> float:
        """Time constant of the slowest decaying part, s."""
        return -1 / max(p.real for p in self.poles)

    def coefficients(self) -> tuple[list[float], list[float]]:
        """Numerator and denominator in descending powers of s, the delay left out."""
        wn = 2 * math.pi * self.natural_frequency
        return [self.gain * wn**2], [1.0, 2 * self.damping_ratio * wn, wn**2]
