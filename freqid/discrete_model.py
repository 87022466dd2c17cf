"""What does a controller see at its own rate? The exact discrete equivalent of the model behind a zero-order hold.

    y[k] = -a1 y[k-1] - a2 y[k-2] + b0 u[k-d] + b1 u[k-d-1] + b2 u[k-d-2] + b3 u[k-d-3]

y in angle unit, u in V, both about the operating point, u held over each interval T. The delay tau = d T + m with
0 <= m < T need not be whole samples: x' = A x + B u gives

    x[k+1] = Phi x[k] + Gamma0 u[k-d] + Gamma1 u[k-d-1],
    Gamma0 = int_0^(T-m) exp(A s) ds B,   Gamma1 = exp(A (T-m)) int_0^m exp(A s) ds B,

hence b0 = 0 always (b1 comes one interval after the voltage) and b3 = 0 where m = 0. Source: Astrom & Wittenmark,
*Computer-Controlled Systems*, 3rd ed. 1997, section 2.3 (systems with time delay).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.quantity import in_unit
from freqid.second_order import SecondOrder

__all__ = ["DiscreteModel", "held_equivalent"]

Floats = NDArray[np.float64]
WHOLE = 1e-9  # a delay this near to whole samples (in samples) is taken as whole: rounding of tau / T
# At this many times the natural frequency the denominator's sum is (2 pi / 1e5)^2 = 4e-9: rounding moves the gain
# by 1e-16 / 4e-9 = 5e-8 of it, less than any test determines. At so small a part nothing is left but the static gain.
RATE_SPAN = 1e5
LONGEST_DELAY = 60.0  # s, as in the rig sheet


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DiscreteModel:
    """Coefficients of powers of 1/z: `numerator` (4,) in angle unit per V, after `delay_samples`; `denominator` (3,).

    The transfer function is z^-delay_samples * (b0 + b1/z + b2/z^2 + b3/z^3) / (1 + a1/z + a2/z^2).
    """

    sample_rate: float = in_unit("Hz")
    numerator: Floats
    denominator: Floats
    delay_samples: int

    def response(self, frequency: Floats) -> NDArray[np.complex128]:
        """Response at `frequency` (F,) Hz, angle unit per V, complex (F,); of use below half the sample rate."""
        z = np.exp(-2j * np.pi * np.asarray(frequency, dtype=float) / self.sample_rate)
        ratio = np.polyval(self.numerator[::-1], z) / np.polyval(self.denominator[::-1], z)
        return np.asarray(ratio * z**self.delay_samples, dtype=complex)


def held_equivalent(
    model: SecondOrder, *, sample_rate: float, delay_samples: int | None = None
) -> DiscreteModel:
    """The discrete model at `sample_rate` Hz.

    `delay_samples` fixes how much of the delay is counted in whole samples (for derivatives with respect to the delay,
    where the count must not jump); None: as many as there are.

    Raises
    ------
    ValueError
        The sample rate is not positive or beyond `RATE_SPAN` times (or parts of) the natural frequency, or the delay is
        negative (the angle would come before the voltage) or beyond `LONGEST_DELAY`.

    Examples
    --------
    >>> vane = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
    >>> at_controller = held_equivalent(vane, sample_rate=200.0)
    >>> at_controller.delay_samples, [round(float(a), 5) for a in at_controller.denominator]
    (4, [1.0, -1.96886, 0.97763])
    """
    if not sample_rate > 0 or not math.isfinite(sample_rate):
        raise ValueError(f"the controller's rate must be positive, not {sample_rate=} Hz")
    slowest, fastest = model.natural_frequency / RATE_SPAN, model.natural_frequency * RATE_SPAN
    if not slowest <= sample_rate <= fastest:
        raise ValueError(
            f"the controller's rate, {sample_rate:g} Hz, must be at least {slowest:.3g} and at most {fastest:.3g} Hz"
            f" for a natural frequency of {model.natural_frequency:.3g} Hz"
        )
    if not 0 <= model.delay <= LONGEST_DELAY:
        raise ValueError(f"the delay, {model.delay:g} s, must be at least 0 and at most {LONGEST_DELAY:g} s")
    interval = 1 / sample_rate
    whole = math.floor(model.delay * sample_rate + WHOLE) if delay_samples is None else delay_samples
    part = model.delay - whole * interval
    if abs(part) < WHOLE * interval:
        part = 0.0
    phi, early = _propagated(model, interval - part)
    rest, late = _propagated(model, part)
    whole_step = phi @ rest
    gamma = (early, phi @ late)
    numerator = np.zeros(4)
    for lag, one in enumerate(gamma):  # C (z I - Phi)^-1 Gamma with C = (1, 0), in powers of 1/z
        numerator[1 + lag] += one[0]
        numerator[2 + lag] += whole_step[0, 1] * one[1] - whole_step[1, 1] * one[0]
    denominator = np.array([1.0, -np.trace(whole_step), np.linalg.det(whole_step)])
    return DiscreteModel(
        sample_rate=sample_rate, numerator=numerator, denominator=denominator, delay_samples=whole
    )


def _propagated(model: SecondOrder, time: float) -> tuple[Floats, Floats]:
    """exp(A t) (2, 2) and its integral times B (2,), from one matrix exponential (C. Van Loan 1978)."""
    from scipy.linalg import expm

    wn = 2 * math.pi * model.natural_frequency  # time in units of 1/wn keeps the matrix well scaled
    a = np.zeros((3, 3))
    a[0, 1], a[1, 0], a[1, 1], a[1, 2] = 1.0, -1.0, -2 * model.damping_ratio, model.gain
    both = np.asarray(expm(a * wn * time), dtype=float)
    return both[:2, :2], both[:2, 2]
