"""What is the response to a sweep, steps or any other voltage? The local polynomial method, without leakage.

In a window of 2 n + 1 bins around each frequency the output spectrum is

    Y(k + r) = [G + g1 r + ... + gR r^R] U(k + r) + [T + t1 r + ... + tR r^R] + noise

solved by least squares; the polynomial T takes up the leakage (transients at both ends), the residual gives the noise
variance with q = 2 n + 1 - 2 (R + 1) complex degrees of freedom. It is applied to what the whole-record fit left over,
so
G here is a small, smooth correction to the fitted model; a lost frame or jitter, filled on the grid,
then disturbs only that correction.

Source: Schoukens, Vandersteen, Barbe & Pintelon, IEEE TIM 62(5) 2013, 1346-1353; Pintelon & Schoukens 2012, ch. 7.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.errors import EstimationError
from freqid.estimate.frame_grid import FrameGrid
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit

__all__ = ["LocalFit", "fit_locally", "local_polynomial_response"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

ORDER = 2
HALF_WINDOW = 7  # bins: q = 9 complex degrees of freedom
WEAKEST_INPUT = 0.03  # of the strongest local input amplitude


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LocalFit:
    """G (B,), its variance, the noise variance of one bin and the local mean input power, at bins `centre` (B,)."""

    centre: NDArray[np.intp]
    response: Complexes
    variance: Floats
    noise: Floats
    degrees_of_freedom: int


def fit_locally(
    output: Complexes, drive: Complexes, centre: NDArray[np.intp], *, half_window: int = HALF_WINDOW, order: int = ORDER
) -> LocalFit:
    """Local polynomial fit of two spectra (K,) at the bins `centre` (B,), each at least `half_window` from both
    ends.
    """
    r = np.arange(-half_window, half_window + 1)
    powers = (r / half_window)[:, None] ** np.arange(order + 1)
    window = centre[:, None] + r
    scale = np.sqrt(np.mean(np.abs(drive[window]) ** 2, axis=1))
    u = drive[window] / scale[:, None]
    ones = np.broadcast_to(powers, (len(centre), *powers.shape))
    regressors = np.concatenate([u[:, :, None] * powers, ones], axis=2)
    q, upper = np.linalg.qr(regressors)
    target = output[window][:, :, None]
    projected = np.conj(np.swapaxes(q, 1, 2)) @ target
    solution = np.linalg.solve(upper, projected)[:, 0, 0] / scale
    degrees = len(r) - 2 * (order + 1)
    noise = (np.sum(np.abs(target) ** 2, axis=(1, 2)) - np.sum(np.abs(projected) ** 2, axis=(1, 2))) / degrees
    noise = np.maximum(noise, 1e-300)
    inverse = np.linalg.inv(upper)
    factor = np.sum(np.abs(inverse[:, 0, :]) ** 2, axis=1) / scale**2
    return LocalFit(
        centre=centre, response=solution, variance=noise * factor, noise=noise, degrees_of_freedom=degrees
    )


def local_polynomial_response(record: Record, fit: RecordFit) -> tuple[FrequencyResponse, NDArray[np.bool_]]:
    """Frequency response of the record around its whole-record fit, and which points are mutually independent.

    Raises EstimationError where the record is too short or the input excites nothing.
    """
    p = fit.parameters
    grid = FrameGrid.from_stamps(record.stamp)
    frequency = grid.frequency / p.clock_ratio
    residual = grid.filled(fit.residual)
    output = np.fft.rfft(residual - residual.mean())
    interval = grid.interval * p.clock_ratio
    end = p.clock_ratio * (record.stamp[0] + grid.interval * np.arange(grid.size)) - p.model.delay
    averaged = record.drive.mean(end, interval)
    seen = np.fft.rfft(averaged - averaged.mean())
    box = _average(frequency, interval)
    centre, independent = _centres(seen / np.where(np.abs(box) > 1e-3, box, 1), frequency, record, fit)
    local = fit_locally(output, seen, centre)
    f = frequency[centre]
    correction = box[centre] / _average(f, record.exposure)
    lag = np.exp(-2j * np.pi * f * p.model.delay)
    response = p.model.response(f) + local.response * correction * lag
    variance = local.variance * np.abs(correction) ** 2
    amplitude = 2 / grid.size
    drive_amplitude = np.abs(seen[centre]) * amplitude / np.abs(box[centre])
    noise = np.sqrt(local.noise) * amplitude
    signal = np.abs(response * _average(f, record.exposure)) * drive_amplitude
    measured = FrequencyResponse(
        frequency=f,
        response=response,
        variance=variance,
        coherence=signal**2 / (signal**2 + noise**2),
        noise=noise,
        input_amplitude=drive_amplitude,
        degrees_of_freedom=np.full(len(f), 2.0 * local.degrees_of_freedom),
        angle_unit=record.angle_unit,
        method="local-polynomial",
    )
    return measured, independent


def _average(frequency: Floats, width: float) -> Complexes:
    """Response of a mean over [t - width, t]."""
    return np.asarray(np.sinc(frequency * width) * np.exp(-1j * np.pi * frequency * width))


def _centres(
    drive: Complexes, frequency: Floats, record: Record, fit: RecordFit
) -> tuple[NDArray[np.intp], NDArray[np.bool_]]:
    n = HALF_WINDOW
    last = min(len(frequency) - n - 1, int(0.9 * len(frequency)))
    if last <= n + 1:
        raise EstimationError(
            f"{len(record.stamp)} frames are too few for a frequency response ({4 * n + 4} are needed): record longer"
        )
    power = np.concatenate([[0.0], np.cumsum(np.abs(drive) ** 2)])
    bins = np.arange(n + 1, last)
    local = np.sqrt((power[bins + n + 1] - power[bins - n]) / (2 * n + 1))
    excited = bins[local > WEAKEST_INPUT * local.max()]
    m = fit.parameters.model
    width = 2 * m.damping_ratio * m.natural_frequency
    near = np.abs(frequency - m.natural_frequency) < 2 * width
    chosen, independent, next_bin, next_free = [], [], 0, 0
    for k in excited:
        if k < next_bin:
            continue
        free = k >= next_free
        chosen.append(k)
        independent.append(free)
        if free:
            next_free = k + 2 * n + 1
        apart = 2 * n + 1
        if near[k]:
            apart = int(np.clip(width / 6 / frequency[1], 1, apart))
        next_bin = k + max(apart, int(0.03 * k))
    return np.array(chosen, dtype=np.intp), np.array(independent, dtype=bool)
