"""What is the response at the lines of a periodic voltage? Least squares at the true instants of the frames.

Nothing is interpolated: over the steady part, what the whole-record fit left over is regressed on a cosine and a sine
at every
excited line, together with rest angle, drift, what is left of the start-up transient (free decay of the fitted poles)
and a small change of the clock ratio. The start-up transient itself is in the whole-record fit. The uncertainty comes
from
the noise between the harmonics, which is the scatter from period to period; with a single period, from unexcited
harmonics.

Source: Pintelon & Schoukens, *System Identification*, 2nd ed. 2012, ch. 2 and 4; sine fitting with known frequency:
IEEE Std 1241.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.errors import EstimationError
from freqid.estimate.frame_grid import FrameGrid
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.harmonic_basis import HarmonicBasis
from freqid.estimate.noise_spectrum import MOST_ELEMENTS, NoiseSpectrum, noise_spectrum
from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit
from freqid.held_response import Drive, free_decay
from freqid.quantity import Caveat
from freqid.records import Periodicity

__all__ = ["LineRegression", "line_amplitudes", "periodic_response", "steady_noise"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
FULLEST = 0.8  # of the frames: more columns than this leave no noise to judge by
ROOMY = 0.45  # of the frames: as many columns still tell all harmonics apart when frames are lost
EDGE = 0.02  # of a frame: so much earlier the window begins, so that rounding takes no frame from a whole period
MOST_COLUMNS = 1500  # with more, the harmonics far from the lines are left out


def line_amplitudes(drive: Drive, periodicity: Periodicity) -> Complexes:
    """Complex amplitude (F,) of the continuous voltage at each line: u(t) = Re sum U exp(j 2 pi f t).

    Exact for the held staircase and for straight lines, by folding the steady part to one period.
    """
    per_period = periodicity.period / drive.interval
    n = round(per_period)
    first = round((periodicity.start - drive.start) / drive.interval)
    whole = max(int((len(drive.value) - first) // n), 0)
    periods = min(periodicity.n_periods, whole)
    f = periodicity.lines
    smooth = bool(np.any(drive.slope))
    hold = np.sinc(f * drive.interval) * np.exp(-1j * np.pi * f * drive.interval)
    if smooth:
        hold = np.sinc(f * drive.interval) ** 2 + 0j
    if periods >= 1 and abs(per_period - n) < 1e-6 * n:
        folded = drive.value[first : first + periods * n].reshape(periods, n).mean(axis=0)
        harmonic = np.round(f * periodicity.period).astype(int)
        amplitude = 2 / n * np.fft.fft(folded)[harmonic % n]
        shift = np.exp(-2j * np.pi * f * (drive.start + first * drive.interval))
        return np.asarray(amplitude * shift * hold)
    raise EstimationError(
        f"the period ({periodicity.period:g} s) is not a whole number of input samples ({per_period:.3f}): "
        "use --method local-polynomial"
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LineRegression:
    """The steady frames and the basis they are regressed on, ready for any residual of the same record.

    `inside` (N,) marks the steady frames. `basis` has a cosine and a minus sine column for each of the F lines and of
    the harmonics `free` (L,) that carry no voltage, where distortion sits (none with a single period), then the
    nuisances: (S, P); `inverse` (P, P) is the inverse of basis' basis; `lag` the lag (s) that the basis' time was
    shifted by; `periods` whole periods are covered.
    """

    periodicity: Periodicity
    inside: NDArray[np.bool_]
    free: NDArray[np.intp]
    basis: HarmonicBasis
    inverse: Floats
    lag: float
    clock_ratio: float
    periods: int

    @classmethod
    def of(cls, record: Record, fit: RecordFit) -> LineRegression:
        """Set up from a fit; raises EstimationError where the frames are too few or cover less than one period."""
        periodicity = record.periodicity
        if periodicity is None:
            raise EstimationError("the excitation is not known to be periodic: use --method local-polynomial")
        inside, time, periods = _steady(record, fit, periodicity)
        basis = _basis(fit, periodicity, inside, time)
        count, width = basis.shape
        if width > FULLEST * count:
            raise EstimationError(
                f"{count} frames cannot carry {len(periodicity.lines)} lines: fewer lines (narrower band, odd grid) "
                f"or a "
                "longer record"
            )
        room = int(min(ROOMY * count, MOST_COLUMNS) - width) // 2 if periods >= 2 else 0
        free = _free_orders(record, fit, periodicity, periods, room=room)
        basis = basis.with_orders(np.concatenate([basis.orders, free]))
        return cls(
            periodicity=periodicity,
            inside=inside,
            free=free,
            basis=basis,
            inverse=basis.inverse_gram(),
            lag=fit.parameters.model.delay,
            clock_ratio=fit.parameters.clock_ratio,
            periods=periods,
        )

    def coefficients(self, residual: Floats) -> Floats:
        """Least-squares coefficients (P,) of a residual (N,) of the whole record."""
        return np.asarray(self.inverse @ self.basis.project(residual[self.inside]))

    def rest(self, residual: Floats) -> Floats:
        """What the basis leaves of a residual, at the steady frames (S,)."""
        return np.asarray(residual[self.inside] - self.basis.combined(self.coefficients(residual)))

    @property
    def spread(self) -> Floats:
        """Variance of each complex amplitude, of the lines and then of the detection lines (F + L,), for noise of
        variance one.
        """
        n, diagonal = len(self.basis.orders), np.diag(self.inverse)
        return np.asarray(diagonal[:n] + diagonal[n : 2 * n])

    def amplitudes(self, residual: Floats) -> Complexes:
        """Complex amplitudes, of the lines and then of the detection lines (F + L,), in a residual (N,)."""
        n, coefficient = len(self.basis.orders), self.coefficients(residual)
        return np.asarray(coefficient[:n] + 1j * coefficient[n : 2 * n])


def _steady(record: Record, fit: RecordFit, periodicity: Periodicity) -> tuple[NDArray[np.bool_], Floats, int]:
    """Frames of the steady part, the time of all frames on the input's clock, and the whole periods they cover."""
    p = fit.parameters
    time = p.clock_ratio * record.stamp - p.model.delay
    first = max(periodicity.start, float(time[0]) - record.frame_interval)
    last = min(periodicity.stop, float(time[-1]) + record.frame_interval)
    periods = int((last - first) / periodicity.period + 0.02)
    if periods < 1:
        raise EstimationError(
            f"the angle log covers {max(last - first, 0):.3g} s of the steady excitation, less than one period "
            f"({periodicity.period:.3g} s): record longer"
        )
    first -= EDGE * record.frame_interval
    inside = (time >= first) & (time < first + periods * periodicity.period)
    return inside, time, periods


def steady_noise(record: Record, fit: RecordFit, lines: LineRegression) -> NoiseSpectrum | None:
    """Noise level between the harmonics of a periodic excitation, independent of any model; None if there is none."""
    period, periods = lines.periodicity.period, lines.periods
    grid = FrameGrid.from_stamps(record.stamp[lines.inside])
    top = 0.5 / record.frame_interval
    # with two periods or more every harmonic is left out, excited or not: distortion sits there
    harmonics = np.arange(1, int(top * period) + 2) / period
    known = harmonics if periods >= 2 else lines.periodicity.lines
    folded = np.abs((known * lines.clock_ratio + top) % (2 * top) - top)
    try:
        return noise_spectrum(
            lines.rest(fit.residual),
            grid,
            fitted=_fitted(lines.basis),
            harmonic=(lines.clock_ratio / (periods * period), folded),
        )
    except ValueError:
        return None


def periodic_response(
    record: Record, fit: RecordFit, lines: LineRegression
) -> tuple[FrequencyResponse, float]:
    """Response at the excited lines with its variance, from what `fit` left over.

    Also how many real degrees of freedom the noise of all lines together rests on.
    """
    f = lines.periodicity.lines
    n = len(f)
    amplitude = lines.amplitudes(fit.residual)[:n]
    noise = steady_noise(record, fit, lines)
    caveats: tuple[Caveat, ...] = ()
    if noise is None:
        rest = lines.rest(fit.residual)
        degrees = lines.basis.shape[0] - lines.basis.shape[1]
        level, freedom = np.full(n, rest @ rest / degrees), np.full(n, float(degrees))
        in_all = float(degrees)
        caveats = (
            Caveat(
                "noise_assumed_white",
                "One period with every harmonic excited shows no noise of its own; it was taken as white from the "
                "residual.",
            ),
        )
    else:
        level, freedom = noise.at(f * lines.clock_ratio)
        in_all = noise.freedom_between(float(f[0]), float(f[-1]))
    exposure = np.sinc(f * record.exposure) * np.exp(-1j * np.pi * f * record.exposure)
    drive = line_amplitudes(record.drive, lines.periodicity)
    transfer = drive * exposure
    variance_of_line = level * lines.spread[:n]
    response = fit.parameters.model.response(f) + amplitude / transfer * np.exp(-2j * np.pi * f * lines.lag)
    signal = np.abs(response * transfer)
    measured = FrequencyResponse(
        frequency=f,
        response=response,
        variance=variance_of_line / np.abs(transfer) ** 2,
        coherence=signal**2 / (signal**2 + lines.periods * variance_of_line),
        noise=np.sqrt(variance_of_line),
        input_amplitude=np.abs(drive),
        input_phase=np.angle(drive),
        degrees_of_freedom=freedom,
        angle_unit=record.angle_unit,
        method="periodic",
        caveats=caveats,
    )
    return measured, in_all


def _free_orders(
    record: Record, fit: RecordFit, periodicity: Periodicity, periods: int, *, room: int
) -> NDArray[np.intp]:
    """Harmonics without voltage below half the frame rate, on which no line folds: all of them where there is `room`,
    else those up to three times the highest line, else those between the lines, else none.
    """
    orders = np.round(periodicity.lines * periodicity.period).astype(np.intp)
    top = 0.5 / record.frame_interval / fit.parameters.clock_ratio * periodicity.period  # in orders
    free = np.setdiff1d(np.arange(1, int(np.ceil(top - 0.5))), orders)
    folded = np.abs((orders + top) % (2 * top) - top)[orders > top]
    apart = np.abs(free[:, None] - folded).min(axis=1, initial=np.inf)
    free = free[apart > 0.55 / periods]
    for low, high in ((0, free[-1:].sum()), (0, 3 * orders.max()), (orders.min(), orders.max())):
        chosen = free[(free >= low) & (free <= high)]
        if len(chosen) <= room:
            return np.asarray(chosen)
    return np.asarray(free[:0])


def _fitted(basis: HarmonicBasis) -> Floats:
    """The columns where their share of each bin is worked out; of more only the shape is looked at."""
    small = basis.shape[0] * basis.shape[1] <= MOST_ELEMENTS
    return basis.columns if small else np.broadcast_to(0.0, basis.shape)


def _basis(fit: RecordFit, periodicity: Periodicity, inside: NDArray[np.bool_], time: Floats) -> HarmonicBasis:
    """Columns: cosine and minus sine of every line, rest, drift, two free decays, clock ratio."""
    t = time[inside]
    m = fit.parameters.model
    decay = free_decay(2 * np.pi * m.natural_frequency, m.damping_ratio, t - t[0])
    columns = [np.ones((len(t), 1)), ((t - t.mean()) / (t[-1] - t[0]))[:, None], decay]
    if 4 in fit.prediction.free:
        ratio = fit.prediction.jacobian[inside][:, fit.prediction.free.index(4)]
        columns.append(ratio[:, None])
    return HarmonicBasis(
        turn=np.exp(2j * np.pi * (t / periodicity.period % 1.0)),
        orders=np.round(periodicity.lines * periodicity.period).astype(np.intp),
        further=np.concatenate(columns, axis=1),
    )
