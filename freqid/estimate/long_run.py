"""How does an hour of two channels at 48 kHz become a record that fits into memory, with nothing of the band lost?

Both streams go through the same steps, chunk by chunk: what the steps do to one they do to the other, and the response
keeps out of it.

1. Means over blocks of samples. White noise keeps its level; what is excited keeps at least sinc^2(1 / 16) = 98.7 % of
   its power (blocks are no longer than a sixteenth of a period of the highest excited frequency).
2. Where the voltage is periodic and the block divides the period: neighbouring periods are averaged in groups, so that
   ten to twenty averaged periods follow each other. In the steady state a linear rig answers the averaged voltage with
   the averaged angle; the periods' mean is all that a least-squares fit to periodic motion takes from a record, and
   the scatter between the groups still tells the noise.
3. A linear-phase low-pass filter, after which the angle keeps every few samples only.

Noise above the band is lost, and with it only the look at it. Averaging supposes that the rig stays the same: where it
drifts, the answer is that of the mean rig. Sources: R. Pintelon & J. Schoukens, *System Identification*, 2nd ed. 2012,
section 2.4 (averaging over periods); J. F. Kaiser 1974 (the window).
"""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from excitation.hdf5_file import file_sha256
from freqid.records import Periodicity, Run
from freqid.run_file import read_run
from freqid.stored_run import EvenRate, OpenRun, StoredStream, open_run

__all__ = ["LONGEST_WHOLE", "read_for_estimate", "shortened"]

Floats = NDArray[np.float64]

LONGEST_WHOLE = 300_000  # samples of both streams together: shorter runs are read as they are
CHUNK = 1 << 18  # samples read at a time, about
GROUPS = range(10, 21)  # averaged periods that are left: so many that least is left over
POINTS = 16  # samples per period of the highest excited frequency after the block means, at least
ANGLE_POINTS = 4.5  # the same for the angle in the end
GLIMPSES, GLIMPSE = 48, 1 << 14  # short looks at the voltage for its band, and their length
BAND_POWER = 0.999  # of the voltage's power lies below the highest excited frequency
ATTENUATION = 80.0  # dB of the low-pass filter


def read_for_estimate(path: Path | str) -> Run:
    """The run in the file `path`, whole where it is short, else `shortened`; with the sha256 of the file.

    Raises TestFolderError as `freqid.run_file.read_run` does.
    """
    path = Path(path)
    with open_run(path) as opened:
        plan = _plan(opened)
        if plan is None:
            return read_run(path)
        # hashing leaves the interpreter to others
        with ThreadPoolExecutor(max_workers=1) as beside:
            digest = beside.submit(file_sha256, path)
            run = shortened(opened, plan)
            return replace(run, file_sha256=digest.result())


@dataclass(frozen=True, slots=True, kw_only=True)
class Shortening:
    """`block` samples become one; `together` neighbouring periods of `period` blocks one; every `kept`-th angle stays.

    `groups` averaged periods are left, none where 0. `first` is the first sample used.
    """

    rate: EvenRate
    highest: float
    block: int
    period: int = 0
    first: int = 0
    groups: int = 0
    together: int = 1
    kept: int = 1

    @property
    def periods(self) -> int:
        """How many periods are used; 0 where nothing is averaged over periods."""
        return self.groups * self.together

    @property
    def interval(self) -> float:
        """Spacing of the block means, s."""
        return self.block / self.rate.sample_rate


def _plan(opened: OpenRun) -> Shortening | None:
    """How to shorten the run; None where it is short, a step test, or its streams were not sampled together."""
    voltage, angle = opened.input, opened.angle
    rate = voltage.rate
    if voltage.size + angle.size <= LONGEST_WHOLE or rate is None or angle.rate != rate or voltage.size != angle.size:
        return None
    if not opened.facts.common_clock or opened.facts.kind == "step":
        return None
    periodicity = opened.facts.input.periodicity
    highest = _highest_frequency(voltage, rate) if periodicity is None else float(periodicity.lines[-1])
    longest = int(rate.sample_rate / (POINTS * highest))
    if longest < 2:
        return None
    plan = None if periodicity is None else _folded(periodicity, rate, voltage.size, longest)
    if plan is None:
        block = longest if periodicity is None else _divisor(_period_in_samples(periodicity, rate), longest)
        if block < 2:
            return None  # no block divides the period: whole, however long that takes
        plan = Shortening(rate=rate, highest=highest, block=block)
    return replace(plan, highest=highest, kept=max(int(1 / (plan.interval * ANGLE_POINTS * highest)), 1))


def _highest_frequency(voltage: StoredStream, rate: EvenRate) -> float:
    """Below which 99.9 % of the voltage's power lies wherever one looks, Hz."""
    window = np.hanning(GLIMPSE)
    power = np.zeros(GLIMPSE // 2 + 1)
    for begin in np.linspace(0, max(voltage.size - GLIMPSE, 0), GLIMPSES).astype(int):
        seen = voltage.values(int(begin), int(begin) + GLIMPSE).astype(float)
        spectrum = np.abs(np.fft.rfft((seen - seen.mean()) * window[: len(seen)], GLIMPSE)) ** 2
        power = np.maximum(power, spectrum)
    share = np.cumsum(power) / max(float(np.sum(power)), 1e-300)
    return float((np.searchsorted(share, BAND_POWER) + 2) * rate.sample_rate / GLIMPSE)


def _period_in_samples(periodicity: Periodicity, rate: EvenRate) -> int:
    """The period in samples; 0 where it is no whole number of them."""
    samples = periodicity.period * rate.sample_rate
    return round(samples) if abs(round(samples) - samples) <= 1e-6 * samples else 0


def _divisor(period: int, longest: int, *, shortest: int = 2) -> int:
    """The longest block from `shortest` to `longest` samples that divides the period; 0 where there is none."""
    return next((b for b in range(longest, shortest - 1, -1) if period and period % b == 0), 0)


def _folded(periodicity: Periodicity, rate: EvenRate, size: int, longest: int) -> Shortening | None:
    """A block that divides the period and groups of periods; None where there are too few, or no such block."""
    period = _period_in_samples(periodicity, rate)
    block = _divisor(period, longest, shortest=max(longest // 3, 1) + 1)
    if block == 0:
        return None
    first = max(round((periodicity.start - rate.start) * rate.sample_rate), 0)
    last = min(round((periodicity.stop - rate.start) * rate.sample_rate), size)
    periods = max((last - first) // period, 0)
    groups = max(GROUPS, key=lambda count: count * (periods // count))
    if periods < 2 * groups:
        return None
    return Shortening(
        rate=rate,
        highest=0.0,
        block=block,
        period=period // block,
        first=first,
        groups=groups,
        together=periods // groups,
    )


def shortened(opened: OpenRun, plan: Shortening) -> Run:
    """The run after the three steps of the module; the memory holds one chunk and the block means."""
    means = [_means(stream, plan) for stream in (opened.input, opened.angle)]
    if plan.periods:
        means = [_averaged(values, plan) for values in means]
    filtered, lost = _filtered(means, plan)
    # a mean belongs to the middle of its block
    start = plan.rate.start + (plan.first + (plan.block - 1) / 2) / plan.rate.sample_rate + lost * plan.interval
    facts = opened.facts
    voltage, angle = filtered[0], filtered[1][:: plan.kept]
    # a held sample acts for the interval after it
    start_of_input = start + (0.5 / plan.rate.sample_rate if facts.input.hold == "zero-order" else 0.0)
    return replace(
        facts,
        input=replace(
            facts.input,
            time=_instants(start_of_input, plan.interval, len(voltage)),
            voltage=voltage,
            hold="smooth",
            commanded=False,
            periodicity=_periodicity(facts.input.periodicity, plan, (start_of_input, len(voltage))),
        ),
        angle=replace(facts.angle, time=_instants(start, plan.interval * plan.kept, len(angle)), angle=angle),
        notes=(*facts.notes, _note(plan, len(angle))),
    )


def _instants(start: float, interval: float, count: int) -> Floats:
    return np.asarray(start + interval * np.arange(count), dtype=np.float64)


def _means(stream: StoredStream, plan: Shortening) -> Floats:
    """Means over the blocks of the samples used."""
    used = plan.periods * plan.period * plan.block or stream.size - plan.first
    count = used // plan.block
    means = np.empty(count)
    weight: NDArray[np.floating] | None = None
    at_once = max(CHUNK // plan.block, 1)
    for begin in range(0, count, at_once):
        stop = min(begin + at_once, count)
        seen = stream.values(plan.first + begin * plan.block, plan.first + stop * plan.block)
        if weight is None:
            weight = np.full(plan.block, 1 / plan.block, dtype=seen.dtype if seen.dtype.kind == "f" else np.float64)
        means[begin:stop] = seen.reshape(-1, plan.block) @ weight
    return means


def _averaged(means: Floats, plan: Shortening) -> Floats:
    """`groups` periods, each the mean of `together` neighbouring ones."""
    return np.asarray(means.reshape(plan.groups, plan.together, plan.period).mean(axis=1)).ravel()


def _filtered(streams: list[Floats], plan: Shortening) -> tuple[list[Floats], int]:
    """Both streams through the low-pass filter as far as it sees no end, and how many points that cost."""
    if plan.kept == 1:
        return streams, 0
    taps = _low_pass(plan)
    if len(taps) > len(streams[0]) // 4:
        return streams, 0
    return [np.convolve(values, taps, mode="valid") for values in streams], len(taps) // 2


def _low_pass(plan: Shortening) -> Floats:
    """Taps (odd number, symmetric) that pass the band and stop what the thinned angle would fold into it."""
    top, fold = plan.highest * plan.interval, 1 / plan.kept
    width = max(fold - 2 * top, 0.2 * fold)  # from the band to what folds onto it
    half = int(np.ceil((ATTENUATION - 8) / (2.285 * 2 * np.pi * width) / 2))
    order = np.arange(-half, half + 1)
    cut = top + width / 2
    taps = 2 * cut * np.sinc(2 * cut * order) * np.kaiser(2 * half + 1, 0.1102 * (ATTENUATION - 8.7))
    return np.asarray(taps / np.sum(taps))


def _periodicity(known: Periodicity | None, plan: Shortening, input_grid: tuple[float, int]) -> Periodicity | None:
    """The period on the shortened record's own time: whole periods from its first point on."""
    if known is None:
        return None
    start, count = input_grid
    stop = start + count * plan.interval
    if plan.periods:
        return replace(known, start=start, stop=stop)
    return replace(known, start=max(known.start, start), stop=min(known.stop, stop))


def _note(plan: Shortening, frames: int) -> str:
    words = [f"a long run: means over {plan.block} samples"]
    if plan.periods:
        words.append(
            f"{plan.together} neighbouring periods averaged into one ({plan.periods} of them into {plan.groups})"
        )
    if plan.kept > 1:
        words.append(f"one angle in {plan.kept} kept after a low-pass filter")
    return ", ".join(words) + f": {frames} angle samples, the band up to {plan.highest:.3g} Hz"
