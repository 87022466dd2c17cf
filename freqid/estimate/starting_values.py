"""Where should the fit begin? A bank of second-order rigs, each matched against the record.

For every natural frequency and damping ratio of a coarse grid the exact response to the drive is simulated on
the sensor's grid and correlated with the angle at all lags at once (FFT). The best correlation gives
gain, its sign and the lag together, so that an unknown clock offset and a reversed sensor need no special case: the
rest
before and after the excitation takes part in the correlation.

Source: matched filter (North 1943), the maximum-likelihood lag of a known waveform in white noise.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.record import Record
from freqid.second_order import SecondOrder

__all__ = ["Candidate", "starting_values"]

Floats = NDArray[np.float64]

DAMPING_GRID = (0.05, 0.2, 0.7, 2.0)
FREQUENCY_RATIO = 1.15
POINTS_PER_PERIOD = 16  # of the highest excited frequency, on the bank's grid
MOST_RATIOS = 32  # on either side, before a part of the record is looked at first
WIDER = 1.1  # than the band, for what the bank looks at
ALIKE, MOST_ALIKE = 0.5, 2  # starts within a factor 1.65 in frequency, of which so many at most: others get a turn
LOPSIDED = 0.02  # mean over standard deviation of the drive: from there on the padding changes the mean of a shape
LARGEST_RATIO_ERROR = 1.6e-3  # of two ordinary crystal clocks; design limit 1e-3


@dataclass(frozen=True, slots=True, kw_only=True)
class Candidate:
    """A start for the fit and the share (0-1) of the angle's variance it explains."""

    model: SecondOrder
    clock_ratio: float
    explained: float


def starting_values(record: Record, *, count: int = 6) -> list[Candidate]:
    """The `count` best distinct starts, best first."""
    band = _input_band(record)
    bank = _Bank(record, band[1])
    low, high = _frequency_range(record, band)
    frequencies = low * FREQUENCY_RATIO ** np.arange(int(np.log(high / low) / np.log(FREQUENCY_RATIO)) + 1)
    found = [c for f in frequencies for z in DAMPING_GRID for c in bank.match(float(f), z, 1.0)]
    best = _distinct(found, count)
    if record.common_clock:
        return best
    return _distinct(best + [c for b in best[:2] for c in bank.match_ratios(b)], count)


def _input_band(record: Record) -> tuple[float, float]:
    """Frequencies below which 1 % and 99.9 % of the input's power lies, Hz."""
    value = record.drive.value - np.mean(record.drive.value)
    size = _smooth_size(len(value))
    power = np.cumsum(np.abs(np.fft.rfft(value, size)) ** 2)
    share = power / power[-1]
    resolution = 1 / (size * record.drive.interval)
    return float(np.searchsorted(share, 0.01) * resolution), float((np.searchsorted(share, 0.999) + 1) * resolution)


def _frequency_range(record: Record, band: tuple[float, float]) -> tuple[float, float]:
    duration = record.stamp[-1] - record.stamp[0]
    low = max(2.0 / duration, 0.2 * band[0])
    high = min(0.9 / record.frame_interval, 5 * band[1], 0.45 / record.drive.interval)
    return low, max(high, 2 * low)


def _distinct(found: list[Candidate], count: int) -> list[Candidate]:
    chosen: list[Candidate] = []
    for c in sorted(found, key=lambda item: -item.explained):
        near = any(
            abs(np.log(c.model.natural_frequency / o.model.natural_frequency)) < 0.2
            and c.model.damping_ratio == o.model.damping_ratio
            and abs(c.model.delay - o.model.delay) < 0.1 / c.model.natural_frequency
            and abs(c.clock_ratio - o.clock_ratio) < 1e-9
            for o in chosen
        )
        alike = sum(
            abs(np.log(c.model.natural_frequency / o.model.natural_frequency)) < ALIKE
            and c.clock_ratio == o.clock_ratio
            for o in chosen
        )
        if not near and alike < MOST_ALIKE:
            chosen.append(c)
        if len(chosen) == count:
            break
    return chosen


class _Bank:
    """The record on a uniform grid and its spectrum, ready to be correlated with many rigs.

    Shapes are made in the frequency domain: the drive, averaged over the steps of the grid, times the rig's response.
    The
    averaging is divided out again; the drive is taken as returning to rest after its end (far enough off by zero
    padding).
    """

    def __init__(self, record: Record, highest: float) -> None:
        self._record = record
        self._step = max(record.frame_interval, 1 / (POINTS_PER_PERIOD * highest))
        self._angle = record.angle - np.mean(record.angle)
        self._span = float(record.stamp[-1] - record.stamp[0])
        begin = float(record.stamp[0]) if record.common_clock else record.drive.start
        end = float(record.stamp[-1]) if record.common_clock else record.drive.stop + min(self._span, 5.0)
        self._grid = begin + self._step * np.arange(int((end - begin) / self._step) + 1, dtype=float)
        longest = int(self._span * (1 + LARGEST_RATIO_ERROR) / self._step) + 1
        self._size = _smooth_size(len(self._grid) + longest)
        averaged = record.drive.mean(self._grid, self._step)
        # what lies above the band is a thousandth of the power
        frequency = np.fft.rfftfreq(self._size, self._step)[1:]
        self._frequency = frequency[frequency <= WIDER * highest]
        average = np.sinc(self._frequency * self._step) * np.exp(-1j * np.pi * self._frequency * self._step)
        self._drive = self._spectrum(averaged) / average
        self._driven = int((record.drive.stop - begin) / self._step)
        self._lopsided = abs(float(np.mean(averaged))) > LOPSIDED * float(np.std(averaged))
        self._spectra: dict[tuple[float, int], tuple[NDArray[np.complex64], float]] = {}
        self._whole = len(self._resampled(1.0))

    def _spectrum(self, values: Floats) -> NDArray[np.complex64]:
        """Bins of the band, without the mean; seven digits are enough for a start, and twice as fast."""
        whole = np.fft.rfft(values.astype(np.float32), self._size)
        return np.asarray(whole[1 : len(self._frequency) + 1], dtype=np.complex64)

    def _resampled(self, ratio: float) -> Floats:
        n = int(self._span * ratio / self._step) + 1
        when = self._record.stamp[0] + self._step / ratio * np.arange(n)
        return np.asarray(np.interp(when, self._record.stamp, self._angle))

    def _angle_spectrum(self, ratio: float, count: int) -> tuple[NDArray[np.complex64], float]:
        """Spectrum and energy of the liveliest `count` steps of the angle, the rest silenced."""
        if (ratio, count) not in self._spectra:
            values = self._resampled(ratio)
            if count < self._whole:
                energy = np.concatenate([[0.0], np.cumsum(values**2)])
                begin = int(np.argmax(energy[count:] - energy[: len(energy) - count]))
                values[:begin] = 0.0
                values[begin + count :] = 0.0
            self._spectra[ratio, count] = self._spectrum(values), float(np.sum(values**2))
        return self._spectra[ratio, count]

    def match(self, frequency: float, damping: float, ratio: float, *, count: int | None = None) -> list[Candidate]:
        """The two best lags of one rig, for the whole angle or the liveliest `count` steps of it."""
        unit = SecondOrder(gain=1.0, natural_frequency=frequency, damping_ratio=damping)
        x = (self._frequency / frequency).astype(np.float32)
        shape = self._drive / ((1 - x * x) + np.complex64(2j * damping) * x)
        # Parseval
        own = self._energy(shape) if self._lopsided else 2 * float(np.vdot(shape, shape).real) / self._size
        spectrum, energy = self._angle_spectrum(ratio, self._whole if count is None else count)
        if not (own > 0 and energy > 0):
            return []
        product = np.zeros(self._size // 2 + 1, dtype=np.complex64)
        product[1 : len(shape) + 1] = spectrum * np.conj(shape)
        correlation = np.fft.irfft(product, self._size)
        strength = self._within(np.abs(correlation), int(self._span * ratio / self._step) + 1)
        results = []
        for _ in range(2):
            best = int(np.argmax(strength))
            results.append(self._candidate(unit, ratio, best, float(correlation[best]) / own, own / energy))
            exclude = max(int(0.1 / frequency / self._step), 1)
            strength[np.arange(best - exclude, best + exclude + 1) % self._size] = 0.0
        return results

    def _energy(self, shape: NDArray[np.complex64]) -> float:
        """Energy of a shape about its mean over the record, where that mean is not that of the padded one."""
        whole = np.zeros(self._size // 2 + 1, dtype=np.complex64)
        whole[1 : len(shape) + 1] = shape
        wave = np.fft.irfft(whole, self._size)[: len(self._grid)]
        return float(np.sum((wave - np.mean(wave)) ** 2))

    def _within(self, strength: NDArray[np.float32], n_angle: int) -> NDArray[np.float32]:
        """Zero where the lag is out of the question. Lag j moves the shape j steps later on the angle's grid; negative
        ones wrap.
        """
        if self._record.common_clock:
            strength[max(n_angle // 4, 1) : self._size - 2] = 0.0
        elif self._lopsided:  # the step back to rest that padding makes is none that the angle could show
            most_missed = 0.5 * min(n_angle, self._driven)
            strength[int(n_angle - most_missed) + 1 : self._size - int(self._driven - most_missed)] = 0.0
        else:
            strength[n_angle : self._size - len(self._grid) + 1] = 0.0
        return strength

    def _candidate(self, unit: SecondOrder, ratio: float, best: int, gain: float, share: float) -> Candidate:
        moved = (best if best < self._size // 2 else best - self._size) * self._step
        # the shape's grid begins at grid[0] of the drive's clock, the angle's at ratio * stamp[0]
        lag = moved + ratio * self._record.stamp[0] - self._grid[0]
        return Candidate(
            model=replace(unit, gain=float(gain), delay=float(lag)),
            clock_ratio=ratio,
            explained=float(gain**2 * share),
        )

    def match_ratios(self, candidate: Candidate) -> list[Candidate]:
        """The same rig at clock ratios so spaced that a tenth of its cycle slips between them over the record.

        In a long record with a period the liveliest part is looked at first, where few ratios need to be tried, then
        longer parts with the ratios around the best.
        """
        m = candidate.model
        slip = 0.2 / m.natural_frequency
        if slip / self._span > LARGEST_RATIO_ERROR:
            return []
        centre, reach, span = 1.0, LARGEST_RATIO_ERROR, self._span
        if self._record.periodicity is not None:
            span = min(span, MOST_RATIOS * slip / LARGEST_RATIO_ERROR)
        while True:
            spacing = slip / span
            steps = int(reach / spacing) + 1
            ratios = [r for r in centre + spacing * np.arange(-steps, steps + 1) if abs(r - 1) <= LARGEST_RATIO_ERROR]
            count = self._whole if span >= self._span else int(span / self._step)
            found = [
                c
                for r in ratios
                if r != 1.0 or count < self._whole
                for c in self.match(m.natural_frequency, m.damping_ratio, float(r), count=count)[:1]
            ]
            if span >= self._span or not found:
                return found
            centre, reach = max(found, key=lambda c: c.explained).clock_ratio, 2 * spacing
            span = min(4 * span, self._span)


def _smooth_size(least: int) -> int:
    """Smallest product of twos, threes and fives that is even and at least `least`: lengths that transform fast."""
    best = 2 ** max((least - 1).bit_length(), 1)
    for fives in (5**k for k in range(best.bit_length())):
        for product in (fives * 3**k for k in range(best.bit_length())):
            if 2 * product >= best:
                break
            size = product * 2 ** max((-(-least // product) - 1).bit_length(), 1)
            best = min(best, size)
    return int(best)
