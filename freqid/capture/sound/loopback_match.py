"""How does the recorded voltage follow the one that was sent: with which gain, offset and delay, and how closely?

The recorded voltage is taken as gain * sent(n - delay) + offset. The delay in whole frames begins as the lag of the
largest cross-correlation; gain, offset and what remains of the delay follow by least squares on the sent voltage, its
derivative by frames and a constant (the first-order expansion of a small shift), again until less than a frame remains.

Source: Bendat & Piersol, *Random Data*, 4th ed. 2010, ch. 5 (cross-correlation and delay).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.quantity import in_unit

__all__ = ["LoopbackMatch", "match_about", "match_loopback", "shift_since"]

Floats = NDArray[np.float64]

LEAST_RESIDUAL = 1e-3  # of the voltage sent: no recording is closer
LARGEST_CORRECTION = 1000.0  # frames at a time
INDEPENDENT = 10  # samples, so to say, in a residual that is no white noise


@dataclass(frozen=True, slots=True, kw_only=True)
class LoopbackMatch:
    """recorded(n) = gain * sent(n - delay) + offset, `residual` rms aside; `delay` = `lag` + a fraction of a frame.

    `vagueness` is what the delay's uncertainty would make of the recorded voltage, rms: large where the voltage is so
    straight that a shift looks like an offset.
    """

    gain: float = in_unit("1")
    offset: float = in_unit("V")
    lag: int = in_unit("frames")
    fraction: float = in_unit("frames")
    residual: float = in_unit("V")
    vagueness: float = in_unit("V")

    @property
    def delay(self) -> float:
        """Frames by which the recorded voltage is later."""
        return self.lag + self.fraction


def match_loopback(sent: Floats, recorded: Floats, *, most: int) -> LoopbackMatch | None:
    """Match two records (N,) in V of the same frames; `most` frames is the largest delay looked for.

    None where the sent voltage does not move, or the records are not longer than `most`.
    """
    if sent.size <= most + 2 or np.ptp(sent) == 0:
        return None
    lag, tried = _lag(sent, recorded, most), set[int]()
    while True:
        match = match_about(lag, sent, recorded)
        tried.add(lag)
        closer = min(max(0, lag + round(match.fraction)), most)
        if closer in tried or not abs(match.fraction) > 0.5:
            return match
        lag = closer  # the correlation of a slow voltage is flat at its top; the least squares know better


def match_about(lag: int, sent: Floats, recorded: Floats) -> LoopbackMatch:
    """Gain, offset and the rest of the delay by least squares, the lag given."""
    later, earlier = recorded[lag + 1 : sent.size - 1], sent[1 : sent.size - 1 - lag]
    slope = (sent[2 : sent.size - lag] - sent[: sent.size - 2 - lag]) / 2
    columns = np.stack([earlier, -slope, np.ones_like(earlier)], axis=1)
    (gain, shift, offset), *_ = np.linalg.lstsq(columns, later, rcond=None)
    residual = float(np.sqrt(np.mean((later - columns @ np.array([gain, shift, offset])) ** 2)))
    return LoopbackMatch(
        gain=float(gain),
        offset=float(offset),
        lag=lag,
        fraction=float(np.clip(shift / gain, -LARGEST_CORRECTION, LARGEST_CORRECTION)) if gain else 0.0,
        residual=residual,
        vagueness=_vagueness(earlier, slope, max(residual, LEAST_RESIDUAL * abs(float(gain)) * float(np.std(sent)))),
    )


def shift_since(match: LoopbackMatch, sent: Floats, recorded: Floats) -> tuple[float, float, float]:
    """How a later part departs from the match: shift in frames, its standard uncertainty, rms of what remains in V.

    `sent` (N + lag + 2,) begins `lag + 1` frames before `recorded` (N,) and ends one frame after it. Good for shifts
    that are small against the period of the voltage; a larger one shows in the remainder.
    """
    n = recorded.size
    expected = sent[1 : 1 + n]
    slope = (sent[2 : 2 + n] - sent[:n]) / 2
    departure = recorded - match.gain * (expected - match.fraction * slope) - match.offset
    columns = np.stack([-match.gain * slope, np.ones(n)], axis=1)
    normal = columns.T @ columns
    determinant = normal[0, 0] * normal[1, 1] - normal[0, 1] ** 2
    if not determinant > 1e-9 * normal[0, 0] * normal[1, 1]:
        return 0.0, float("inf"), float(np.sqrt(np.mean(departure**2)))
    shift, offset = np.linalg.solve(normal, columns.T @ departure)
    rest = departure - columns @ np.array([shift, offset])
    noise = 1.4826 * float(np.median(np.abs(rest)))  # of a normal distribution; blind to the few samples at an edge
    return float(shift), noise * float(np.sqrt(normal[1, 1] / determinant)), float(np.sqrt(np.mean(rest**2)))


def _vagueness(sent: Floats, slope: Floats, residual: float) -> float:
    """Residual over the part of the slope that neither gain nor offset can imitate, times the slope, all rms."""
    others = np.stack([sent, np.ones_like(sent)], axis=1)
    own = slope - others @ np.linalg.lstsq(others, slope, rcond=None)[0]
    telling = float(np.sqrt(np.mean(own**2)))
    whole = float(np.sqrt(np.mean(slope**2)))
    return residual * whole / (telling * INDEPENDENT**0.5) if telling > 1e-6 * whole else float("inf")


def _lag(sent: Floats, recorded: Floats, most: int) -> int:
    n = 1 << (2 * sent.size - 1).bit_length()
    spectrum = np.conj(np.fft.rfft(sent - np.mean(sent), n)) * np.fft.rfft(recorded - np.mean(recorded), n)
    correlation = np.fft.irfft(spectrum, n)[: most + 1]
    # fewer frames overlap at a larger lag: what is compared is the correlation per frame
    overlap = sent.size - np.arange(most + 1)
    return int(np.argmax(np.abs(correlation) / overlap))
