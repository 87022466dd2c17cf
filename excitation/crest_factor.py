"""How are the phases of a multisine chosen so that its power fits under its peak?

A multisine is sum_k a_k cos(2 pi n_k t / T + phi_k); its crest factor is its peak over its rms.
Three choices: random phases, Schroeder's, and a descent on the L_p norm of the waveform with p
raised step by step, which approaches the peak. The descent may weigh several signals that share
the phases (the voltage, its slope, the angle it causes), each in units of its own limit: then it
makes room where the limits are.

Sources: M. R. Schroeder, IEEE Trans. Information Theory 16 (1970) 85-89, doi:10.1109/TIT.1970.1054411;
P. Guillaume, J. Schoukens, R. Pintelon, I. Kollar, IEEE Trans. Instrumentation and Measurement 40
(1991) 982-989, doi:10.1109/19.119778.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from excitation.errors import ExcitationError
from excitation.profile import Floats
from excitation.rig_model import Complexes

__all__ = [
    "crest_factor_of",
    "largest_peak",
    "logarithmic_norm",
    "lower_peak",
    "multisine_waveform",
    "random_phases",
    "schroeder_phases",
]

_WORK = 6e7  # points times iterations: some seconds, however many lines
_NEGLIGIBLE = 1e-15  # a power of the waveform below this is nothing, and may be slow to compute


@dataclass(frozen=True, slots=True, kw_only=True)
class _Effort:
    """Of one descent: the powers in turn, points per period of the highest line, most iterations with each power."""

    powers: tuple[int, ...]
    oversampling: int
    iterations: int


_QUICK = _Effort(powers=(4, 16, 64, 256), oversampling=6, iterations=100)
_THOROUGH = _Effort(powers=(4, 16, 64, 256, 1024), oversampling=12, iterations=300)


def crest_factor_of(voltage: ArrayLike) -> float:
    """Peak magnitude over rms of the samples (M,), without taking a mean off.

    Raises
    ------
    ExcitationError
        No samples, or all are zero.
    """
    samples = np.asarray(voltage, dtype=np.float64)
    rms = math.sqrt(float(np.mean(samples**2))) if samples.size else 0.0
    if rms == 0:
        raise ExcitationError(f"crest factor: {samples.size} samples with an rms of 0 have none")
    return float(np.max(np.abs(samples))) / rms


def schroeder_phases(amplitudes: ArrayLike) -> Floats:
    """Schroeder's phases for consecutive lines with the given amplitudes (F,), in rad.

    phi_k = -2 pi sum_{l<k} (k - l) p_l, p the relative powers; -pi k (k - 1) / F where all are equal.
    """
    power = np.asarray(amplitudes, dtype=np.float64) ** 2
    share = np.cumsum(power / power.sum())
    return -2 * np.pi * np.concatenate([[0.0], np.cumsum(share)[:-1]])


def random_phases(n_lines: int, *, rng: np.random.Generator) -> Floats:
    """Independent phases, uniform from 0 to 2 pi, (F,) in rad."""
    return rng.uniform(0.0, 2 * np.pi, n_lines)


def multisine_waveform(lines: Complexes, *, harmonics: NDArray[np.int64], n_samples: int) -> Floats:
    """One period, (N,): the sum of |c_k| cos(2 pi n_k i / N + arg c_k) for the complex amplitudes c (F,)."""
    spectrum = np.zeros(n_samples // 2 + 1, dtype=np.complex128)
    spectrum[harmonics] = lines * (n_samples / 2)
    return np.asarray(np.fft.irfft(spectrum, n_samples))


def lower_peak(
    phases: Floats,
    *,
    harmonics: NDArray[np.int64],
    signals: Complexes,
    n_starts: int = 1,
    rng: np.random.Generator | None = None,
) -> Floats:
    """Phases that lower the largest peak among the signals; never worse than those they start from.

    Parameters
    ----------
    phases : (F,) array
        Where to start, rad.
    harmonics : (F,) array
        The line numbers, above 0.
    signals : (S, F) complex array
        Amplitude of each line in each signal when its phase is 0, in units of that signal's limit.
    n_starts : int
        1 descends from `phases`, quickly. More is thorough: on a grid twice as fine, to a higher power, from `phases`,
        from Schroeder's and from random ones, and keeps the best; with 8 the crest factor of 31 equal lines is 1.42 or
        less (tests/excitation/test_crest_factor.py).
    rng : numpy.random.Generator or None
        Of the random starts; needed from 3 starts on.

    Returns
    -------
    (F,) array
        rad.

    Raises
    ------
    ExcitationError
        `n_starts` is below 1, or there is no `rng` for the random starts.
    """
    if n_starts < 1 or (n_starts > 2 and rng is None):
        raise ExcitationError(f"n_starts: {n_starts}; give at least 1, and from 3 on an rng for the random starts")
    begin = np.asarray(phases, dtype=np.float64)
    if n_starts == 1:
        return _descend(begin, harmonics, signals, _QUICK)[0]
    starts = [begin, schroeder_phases(np.abs(signals[0]))]
    if rng is not None:
        starts += [random_phases(begin.size, rng=rng) for _ in range(n_starts - 2)]
    lowered = [_descend(start, harmonics, signals, _THOROUGH) for start in starts]
    return min(lowered, key=lambda found: found[1])[0]


def _descend(
    start: Floats, harmonics: NDArray[np.int64], signals: Complexes, effort: _Effort
) -> tuple[Floats, float]:
    """The best phases met on the way down from `start`, and their peak."""
    from scipy.optimize import minimize

    n_samples = 1 << math.ceil(math.log2(effort.oversampling * int(harmonics.max())))
    iterations = int(np.clip(_WORK / (n_samples * len(signals) * len(effort.powers)), 3, effort.iterations))
    best, best_peak = start, largest_peak(signals * np.exp(1j * start), harmonics, n_samples)
    current = best
    for power in effort.powers:
        result = minimize(
            _log_norm,
            current,
            args=(power, harmonics, signals, n_samples),
            jac=True,
            method="L-BFGS-B",
            options={"maxiter": iterations, "ftol": 1e-6},
        )
        current = np.asarray(result.x)
        peak = largest_peak(signals * np.exp(1j * current), harmonics, n_samples)
        if peak < best_peak:
            best, best_peak = current, peak
    return best, best_peak


def largest_peak(signals: Complexes, harmonics: NDArray[np.int64], n_samples: int) -> float:
    """Largest magnitude among the signals with the complex amplitudes (S, F), over `n_samples` points of a period."""
    return float(np.max(np.abs(_waveforms(signals, harmonics, n_samples))))


def logarithmic_norm(
    signals: Complexes, power: int, harmonics: NDArray[np.int64], n_samples: int
) -> tuple[float, Complexes]:
    """Logarithm of the L_p norm of all signals (S, F) together, and its derivative to each line, (F,) complex.

    The real part is the derivative to the logarithm of the line's size, common to all signals; minus the imaginary
    part that to its phase. p is a power of two.
    """
    waveform = _waveforms(signals, harmonics, n_samples)
    peak = np.max(np.abs(waveform))
    relative = waveform / peak
    odd_power = _odd_power(relative, power)
    total = float(np.sum(odd_power * relative))
    # d x[i] / d phi_k = Re(j c_k exp(j(2 pi n_k i / N + phi_k))): one transform for all lines
    transform = np.fft.rfft(odd_power, axis=1)[:, harmonics]
    by_line = np.sum(signals * np.conj(transform), axis=0) / (peak * total)
    return math.log(peak) + math.log(total) / power, np.asarray(by_line)


def _waveforms(signals: Complexes, harmonics: NDArray[np.int64], n_samples: int) -> Floats:
    spectrum = np.zeros((len(signals), n_samples // 2 + 1), dtype=np.complex128)
    spectrum[:, harmonics] = signals * (n_samples / 2)
    return np.asarray(np.fft.irfft(spectrum, n_samples, axis=1))


def _log_norm(
    phases: Floats, power: int, harmonics: NDArray[np.int64], signals: Complexes, n_samples: int
) -> tuple[float, Floats]:
    """Logarithm of the L_p norm of all signals together, and its gradient in the phases."""
    norm, by_line = logarithmic_norm(signals * np.exp(1j * phases), power, harmonics, n_samples)
    return norm, -by_line.imag


def _odd_power(relative: Floats, power: int) -> Floats:
    """To the power p - 1, for p a power of two: the product of the repeated squares below p; its sign survives."""
    square = np.where(np.abs(relative) < _NEGLIGIBLE ** (1 / power), 0.0, relative)
    product = square.copy()
    for _ in range(power.bit_length() - 2):
        square = square * square
        product *= square
    return product
