"""What does the design of an excitation need to know of the rig?

Only its frequency response and how that depends on the four parameters; any object with these two
methods will do. Convention exp(+j 2 pi f t); the model and the order of its parameters:
G(s) = K wn^2 exp(-s tau) / (s^2 + 2 zeta wn s + wn^2), (gain, natural_frequency, damping_ratio, delay).
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray

from excitation.errors import ExcitationError
from excitation.profile import Floats

__all__ = ["Complexes", "Resonance", "RigModel", "find_resonance", "response_of"]

Complexes = NDArray[np.complex128]

_N_SEARCH = 20_000  # points of the search grid: resolves a half-power width of a thousandth of the frequency


@runtime_checkable
class RigModel(Protocol):
    """What is known, or assumed, of the rig."""

    def response(self, frequency: Floats) -> Complexes:
        """Angle per voltage at the frequencies (F,) in Hz, 0 included: (F,), in angle unit per V."""
        ...

    def sensitivity(self, frequency: Floats) -> Complexes:
        """Derivative of the response to gain, natural frequency (Hz), damping ratio and delay (s): (F, 4)."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class Resonance:
    """The peak of the gain and the width between its half-power points."""

    frequency: float = field(metadata={"unit": "Hz"})
    half_power_width: float = field(metadata={"unit": "Hz"})


def response_of(rig: RigModel, frequency: Floats) -> Complexes:
    """Response of the rig at the frequencies (F,) in Hz, checked.

    Raises
    ------
    ExcitationError
        The model does not answer with one finite number per frequency.
    """
    response = np.asarray(rig.response(frequency), dtype=np.complex128)
    if response.shape != frequency.shape or not np.isfinite(response).all():
        raise ExcitationError(
            f"rig model: no finite response at some of {frequency.size} frequencies up to {frequency.max():.6g} Hz; "
            "check its gain, natural frequency, damping ratio and delay"
        )
    return response


def find_resonance(rig: RigModel, *, band: tuple[float, float]) -> Resonance | None:
    """Peak of the gain between the band edges in Hz, or None where no peak stands above its half-power points.

    The width is close to 2 zeta fn for light damping; both half-power points are found up to zeta = 0.38.
    """
    frequency = np.geomspace(band[0], band[1], _N_SEARCH)
    gain = np.abs(response_of(rig, frequency))
    peak = int(np.argmax(gain))
    below_half = gain < gain[peak] / np.sqrt(2)
    left, right = np.flatnonzero(below_half[:peak]), np.flatnonzero(below_half[peak:])
    if left.size == 0 or right.size == 0:
        return None
    width = frequency[peak + right[0]] - frequency[left[-1]]
    return Resonance(frequency=float(frequency[peak]), half_power_width=float(width))
