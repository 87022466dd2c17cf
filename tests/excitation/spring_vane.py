"""A vane to drive in tests, with its answer in frequency and, independently, in time."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from excitation import Profile

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Vane:
    """A spring-centred vane: gain in deg/V, natural frequency in Hz, delay in s."""

    gain: float = 12.0
    natural_frequency: float = 3.0
    damping_ratio: float = 0.12
    delay: float = 0.0

    def response(self, frequency: Floats) -> NDArray[np.complex128]:
        """K wn^2 exp(-s tau) / (s^2 + 2 zeta wn s + wn^2)."""
        s, wn = 2j * np.pi * frequency, 2 * np.pi * self.natural_frequency
        return self.gain * wn**2 * np.exp(-s * self.delay) / (s**2 + 2 * self.damping_ratio * wn * s + wn**2)

    def sensitivity(self, frequency: Floats) -> NDArray[np.complex128]:
        """Derivatives to the four parameters, (F, 4)."""
        s, wn = 2j * np.pi * frequency, 2 * np.pi * self.natural_frequency
        quadratic = s**2 + 2 * self.damping_ratio * wn * s + wn**2
        response = self.response(frequency)
        by_wn = response * (2 / wn - (2 * self.damping_ratio * s + 2 * wn) / quadratic)
        by_damping = -response * 2 * wn * s / quadratic
        return np.stack([response / self.gain, 2 * np.pi * by_wn, by_damping, -s * response], axis=1)

    def motion(self, profile: Profile, *, rest: float = 0.0, finer: int = 1) -> Floats:
        """Angle, its rate and its integral under the held voltage, exact at every step: (M + 1, 3).

        `rest` s at the bias follow the profile; each sample is divided into `finer` steps. The delay must be a
        whole number of steps.
        """
        from scipy.linalg import expm

        step = 1 / (profile.sample_rate * finer)
        wn = 2 * np.pi * self.natural_frequency
        system = np.zeros((4, 4))
        system[0, 1] = system[2, 0] = 1.0
        system[1] = [-(wn**2), -2 * self.damping_ratio * wn, 0.0, self.gain * wn**2]
        transition = expm(system * step)
        n_delay = round(self.delay / step)
        assert abs(n_delay * step - self.delay) < 1e-12
        driven = np.repeat(profile.voltage - profile.bias, finer)
        voltage = np.concatenate([np.zeros(n_delay), driven, np.zeros(round(rest / step))])
        states = np.zeros((voltage.size + 1, 3))
        for index, value in enumerate(voltage):
            states[index + 1] = transition[:3, :3] @ states[index] + transition[:3, 3] * value
        return states
