"""How does a second-order rig move when the voltage stands still, and how do its parameters change that?

With a = zeta wn and time t from a given state, the free motion is made of

    C(t) = e^(-a t) cos(wd t),   S(t) = e^(-a t) sin(wd t) / wd,   wd^2 = wn^2 (1 - zeta^2)

(hyperbolic above zeta = 1). The derivatives of the motion by the parameters obey the same equation, driven by the
motion itself. One further signal carries both: q, the answer of the rig to its own rate,

    q'' + 2 a q' + wn^2 q = theta'      so that     d theta / d zeta = -2 wn q,   d theta / d wn = (2 / wn) (q' + a q)

and its free motion needs G(t) = (S(t) - t C(t)) / (2 wd^2), the impulse response of the equation applied twice.
Source: variation of constants and the sensitivity equation, any text on linear systems (for instance H. K. Khalil,
*Nonlinear Systems*, 3rd ed. 2002, section 3.3).
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

__all__ = ["damped_waves", "moved", "repeated_wave", "transition_matrix"]

Floats = NDArray[np.float64]
# (sin x - x cos x) / (2 x^3) = sum of (-1)^k (2 k + 2) / (2 (2 k + 3)!) x^(2 k)
_SERIES = tuple((-1) ** k * (2 * k + 2) / (2 * math.factorial(2 * k + 3)) for k in range(9))  # 1e-18 at x = 1


def damped_waves(wn: float, zeta: float, time: Floats) -> tuple[Floats, Floats]:
    """C and S of the module at each time (N,) >= 0, s."""
    decay = np.exp(-zeta * wn * time)
    if zeta < 1:
        wd = wn * math.sqrt((1 - zeta) * (1 + zeta))
        argument = wd * time
        return decay * np.cos(argument), decay * np.sin(argument) / wd
    alpha = wn * math.sqrt((zeta - 1) * (zeta + 1))
    if alpha == 0:
        return decay, decay * time
    argument = alpha * time
    fast = np.exp(-(zeta * wn + alpha) * time)
    slow = np.exp(-(wn**2) / (zeta * wn + alpha) * time)  # (zeta wn - alpha), without cancellation
    sinh_over = np.where(argument < 1e-4, time * (1 + argument**2 / 6) * decay, (slow - fast) / (2 * alpha))
    return (slow + fast) / 2, sinh_over


def repeated_wave(wn: float, zeta: float, time: Floats, waves: tuple[Floats, Floats]) -> tuple[Floats, Floats, Floats]:
    """G of the module and its first two derivatives, from `waves` (C and S) at the same times (N,)."""
    cosine, sine = waves
    squared = wn**2 * (1 - zeta) * (1 + zeta)
    argument = squared * time**2
    largest = min(float(np.max(np.abs(argument), initial=0.0)), 1.0)
    terms = next((k for k in range(1, len(_SERIES)) if abs(_SERIES[k]) * largest**k < 1e-18), len(_SERIES))
    series = np.full_like(time, _SERIES[terms - 1])
    for coefficient in _SERIES[terms - 2 :: -1] if terms > 1 else ():
        series *= argument
        series += coefficient
    # C and S hold the decay; the series needs it for itself
    wave = np.exp(-zeta * wn * time) * time**3 * series
    far = np.abs(argument) > 1
    if far.any():
        wave[far] = (sine[far] - time[far] * cosine[far]) / (2 * squared)
    a = zeta * wn
    rate = time * sine / 2 - a * wave
    return wave, rate, sine / 2 + time * (cosine - a * sine) / 2 - a * rate


def transition_matrix(wn: float, zeta: float, time: float) -> Floats:
    """Matrix (4, 4) that moves theta, theta', q, q' of the free motion on by `time` s."""
    at = np.array([time])
    waves = damped_waves(wn, zeta, at)
    cosine, sine = (float(v[0]) for v in waves)
    wave, rate, curvature = (float(v[0]) for v in repeated_wave(wn, zeta, at, waves))
    a = zeta * wn
    own = np.array([[cosine + a * sine, sine], [-(wn**2) * sine, cosine - a * sine]])
    coupled = np.array([[-(wn**2) * wave, rate], [-(wn**2) * rate, curvature]])
    return np.block([[own, np.zeros((2, 2))], [coupled, own]])


def moved(wn: float, zeta: float, time: Floats, state: Floats) -> Floats:
    """Free motion (N, n) after each time (N,) from the states (N, n): theta and theta', with n = 4 also q and q'."""
    waves = damped_waves(wn, zeta, time)
    cosine, sine = waves
    a = zeta * wn
    keeps, loses, pulls = cosine + a * sine, cosine - a * sine, -(wn**2) * sine
    later = np.empty_like(state)
    angle, speed = state[:, 0], state[:, 1]
    later[:, 0] = keeps * angle + sine * speed
    later[:, 1] = pulls * angle + loses * speed
    if state.shape[1] == 4:
        wave, rate, curvature = repeated_wave(wn, zeta, time, waves)
        later[:, 2] = keeps * state[:, 2] + sine * state[:, 3] - wn**2 * wave * angle + rate * speed
        later[:, 3] = pulls * state[:, 2] + loses * state[:, 3] - wn**2 * rate * angle + curvature * speed
    return later
