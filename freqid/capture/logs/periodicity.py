"""Does a measured voltage repeat, and with which period and lines?

A false claim is worse than none, so two cases only are recognised, both on evenly spaced stamps:

(a) two or more whole periods: the voltage one period later differs, rms, by less than `REPEATS_WITHIN`
    of its own rms over a stretch that holds most of the record's power. A swept sine, which resembles
    itself from one cycle to the next but drifts away, does not pass.
(b) exactly one period of many lines with empty lines between them (a multisine of odd lines): the part
    of the power off the lines is below `OFF_LINES`. The leakage of any record that is not a
    period fills the empty lines and fails.

Source for lines and empty lines of a multisine: Pintelon & Schoukens, System Identification: A Frequency
Domain Approach, 2nd ed., 2012, chapter 4 (DOI 10.1002/9781118287422).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from freqid.records import Periodicity

__all__ = ["OFF_LINES", "REPEATS_WITHIN", "find_periodicity"]

REPEATS_WITHIN = 0.02  # rms difference of successive periods over rms of the voltage
OFF_LINES = 3e-4  # power off the lines over total power, one period; mains hum alone may take 1e-4
_POWER_IN_STRETCH = 0.75  # of the record's, at least
_LINE_FLOOR = 1e-5  # power of the weakest line counted as excited, over the strongest
_EVEN_STAMPS = 0.05  # of a step
_COMB_FLOOR = 1e-3  # the same for one period, where nothing tells noise from weak lines
_WIDEST_GAP = 10  # spacings without a line inside a comb
_LEAST_PERIOD = 8  # samples
_LEAST_LINES = 8  # effective number of lines for one period alone
_MOST_CANDIDATES = 40

Floats = NDArray[np.float64]


def find_periodicity(time: Floats, voltage: Floats) -> Periodicity | None:
    """The periodicity of a measured voltage (M,) at the stamps `time` (M,) in s, or None where it is not certain.

    The period is a whole number of samples; `start` and `stop` bound the part that repeats, and the lines are the
    frequencies whose power stands out of what differs between the periods.
    """
    step = _even_step(time)
    if step is None or voltage.size < 2 * _LEAST_PERIOD or not np.all(np.isfinite(voltage)):
        return None
    signal = voltage - voltage.mean()
    if not np.any(signal):
        return None
    repeated = _repeated_part(signal)
    if repeated is not None:
        lag, start, stop = repeated
        bins = _excited_bins(signal[start:stop].reshape(-1, lag))
    else:
        lag, start, stop = signal.size, 0, signal.size
        bins = _comb_of_one_period(signal)
    if bins.size == 0:
        return None
    lines = bins / (lag * step)
    lines.flags.writeable = False
    begin = float(time[0])
    return Periodicity(period=lag * step, lines=lines, start=begin + start * step, stop=begin + stop * step)


def _even_step(time: Floats) -> float | None:
    """The step of evenly spaced stamps, rounding allowed for; None where they are not even."""
    if time.size < 2 * _LEAST_PERIOD or time[-1] <= time[0]:
        return None
    step = float((time[-1] - time[0]) / (time.size - 1))
    drift = time - time[0] - step * np.arange(time.size)
    return step if np.abs(drift).max() < _EVEN_STAMPS * step else None


def _repeated_part(signal: Floats) -> tuple[int, int, int] | None:
    """Period in samples, first and one past the last sample of whole periods that repeat; None without."""
    for lag in _candidate_lags(signal):
        found = _longest_repetition(signal, lag)
        if found is not None:
            return lag, *found
    return None


def _candidate_lags(signal: Floats) -> list[int]:
    """Lags at which the autocorrelation has a high maximum, the shortest first.

    r(L) = 2 sum v[n] v[n+L] / sum (v[n]^2 + v[n+L]^2) over the overlap lies in [-1, 1] and is 1 where v repeats.
    """
    size = signal.size
    spectrum = np.fft.rfft(signal, 2 * size)
    products = np.fft.irfft(np.abs(spectrum) ** 2, 2 * size)[: size // 2 + 2]
    power = np.concatenate([[0.0], np.cumsum(signal**2)])
    lags = np.arange(products.size)
    overlap = power[size - lags] + power[size] - power[lags]
    likeness = 2 * products / np.maximum(overlap, np.finfo(float).tiny)
    inner = likeness[1:-1]
    peaks = np.flatnonzero((inner >= likeness[:-2]) & (inner > likeness[2:]) & (inner > 0.4)) + 1
    first_fall = int(np.argmax(likeness < 0.4)) if np.any(likeness < 0.4) else size
    peaks = peaks[(peaks >= _LEAST_PERIOD) & (peaks > first_fall) & (peaks <= size // 2)]
    best = peaks[np.argsort(likeness[peaks])[::-1][:_MOST_CANDIDATES]]
    return sorted(int(lag) for lag in best)


def _longest_repetition(signal: Floats, lag: int) -> tuple[int, int] | None:
    """The longest run of whole periods in which each resembles the next; None where it is not certain."""
    floor = (REPEATS_WITHIN * _level(signal, lag)) ** 2
    difference = (signal[lag:] - signal[:-lag]) ** 2
    window = max(_LEAST_PERIOD, lag // 16)
    sums = np.concatenate([[0.0], np.cumsum(difference)])
    alike = (sums[window:] - sums[:-window]) / window < 4 * floor  # a short window scatters; checked in full below
    start, length = _longest_run(alike)
    if length == 0:
        return None
    whole = (length + window - 1 + lag) // lag
    if whole < 2:
        return None
    stop = start + whole * lag
    part = signal[start:stop]
    error = float(np.mean(difference[start : stop - lag]))
    holds_power = float(np.sum(part**2)) >= _POWER_IN_STRETCH * float(np.sum(signal**2))
    periods = part.reshape(whole, lag)
    alive = float(periods.std(axis=1).min()) > 0.5 * float(part.std())
    drift = float(np.mean((periods[-1] - periods[0]) ** 2))
    limit = REPEATS_WITHIN**2 * float(part.var())
    return (start, stop) if holds_power and alive and error < limit and drift < limit else None


def _level(signal: Floats, lag: int) -> float:
    """The rms of the strongest stretch of one lag."""
    power = np.concatenate([[0.0], np.cumsum(signal**2)])
    return float(np.sqrt(np.max(power[lag:] - power[:-lag]) / lag))


def _longest_run(true: NDArray[np.bool_]) -> tuple[int, int]:
    edges = np.flatnonzero(np.diff(np.concatenate([[False], true, [False]]).astype(np.int8)))
    if edges.size == 0:
        return 0, 0
    lengths = edges[1::2] - edges[::2]
    longest = int(np.argmax(lengths))
    return int(edges[2 * longest]), int(lengths[longest])


def _excited_bins(periods: Floats) -> NDArray[np.intp]:
    """Bins of the mean period that stand above the weakest line and above ten times the scatter between periods."""
    spectra = np.fft.rfft(periods, axis=1)
    power = np.abs(spectra.mean(axis=0)) ** 2
    scatter = spectra.var(axis=0, ddof=1) / len(periods)
    power[0] = 0.0
    typical = float(np.median(scatter))
    return np.flatnonzero((power > _LINE_FLOOR * power.max()) & (power > 10 * scatter) & (power > 10 * typical))


def _comb_of_one_period(signal: Floats) -> NDArray[np.intp]:
    """The lines of a record that is one period of a comb with empty bins in it; empty where it is none."""
    power = np.abs(np.fft.rfft(signal)) ** 2
    power[0] = 0.0
    none = np.empty(0, dtype=np.intp)
    strong = np.flatnonzero(power > _COMB_FLOOR * power.max())
    if strong.size < _LEAST_LINES:
        return none
    lines = _on_regular_comb(strong)
    if lines.size < _LEAST_LINES:
        return none
    on_lines = float(power[lines].sum())
    effective = on_lines**2 / float(np.sum(power[lines] ** 2))
    off_lines = float(power.sum()) - on_lines
    return lines if effective >= _LEAST_LINES and off_lines < OFF_LINES * float(power.sum()) else none


def _on_regular_comb(strong: NDArray[np.intp]) -> NDArray[np.intp]:
    """Those of the strong bins that lie on their most frequent spacing, in its longest run; empty if that is one bin.

    Single bins elsewhere (mains hum and its harmonics) are no lines. Left-out lines leave gaps in the run.
    """
    spacing = int(np.argmax(np.bincount(np.diff(strong))))
    if spacing < 2:
        return np.empty(0, dtype=np.intp)
    remainder = int(np.argmax(np.bincount(strong % spacing)))
    comb = strong[strong % spacing == remainder]
    runs = np.split(comb, np.flatnonzero(np.diff(comb) > _WIDEST_GAP * spacing) + 1)
    return max(runs, key=len)
