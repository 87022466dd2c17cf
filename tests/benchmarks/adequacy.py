"""How often is an adequate model called inadequate, and how often is an extra pole found?

The records of `accuracy.py`, adequate ones and ones with an unmodelled extra pole at eight times the natural frequency
(24 Hz). Printed per excitation and damping ratio: share of records called inadequate at the 5 % level without and with
the pole; how far the pole's trace stands out of the noise (lambda: the sum of squares that it adds to the best fit,
over the noise variance); and what any test could reach with it:

    ideal    Phi(sqrt(lambda) - 1.645), the most powerful test at 5 % that looks for nothing else (Neyman & Pearson)
    ours     Phi(sqrt(lambda) - 1.960), the pole's half of the 5 % alone, lack of fit and zero left aside

    python tests/benchmarks/adequacy.py [--records 1000] [--pole-records 200] [--damping Z ...] [--kind K ...]
        [--clocks one two] [--noise white|coloured] [--processes N]
"""

from __future__ import annotations

import argparse
from dataclasses import replace
from functools import lru_cache
from multiprocessing import Pool

import numpy as np
from accuracy import DAMPING, KINDS, NOISE, OFFSET, RATIO, Cell, drive, record_run
from scipy.signal import lfilter
from scipy.stats import binom, norm

from freqid.estimate.identification import identify
from freqid.estimate.prediction import MotionParameters
from freqid.estimate.record import Record
from freqid.estimate.record_fit import refine
from freqid.held_response import Drive, HeldResponse
from freqid.records import Run
from freqid.second_order import SecondOrder

POLE = 24.0  # Hz
FINER = 8  # points of the lagging voltage per sample of the staircase: straight lines miss by (h / T)^2 / 8 = 5e-5


@lru_cache(maxsize=16)
def lagging(cell: Cell, variant: int) -> HeldResponse:
    """The rig's unit response to the voltage behind the extra pole."""
    held = drive(cell, variant)
    step = (held.time[1] - held.time[0]) / FINER
    kept = np.exp(-2 * np.pi * POLE * step)
    voltage = lfilter([0, 1 - kept], [1, -kept], np.repeat(held.voltage, FINER))
    behind = Drive.from_samples(voltage, start=float(held.time[0]), interval=step, smooth=True)
    return HeldResponse(behind, cell.model.natural_frequency, cell.model.damping_ratio)


def with_pole(cell: Cell, seed: int, *, noisy: bool = True) -> Run:
    """The run of `record_run` with the extra pole, and the same noise."""
    run = record_run(cell, seed)
    variant = seed % 5 if cell.kind == "multisine" else 0
    ratio, offset = (RATIO, OFFSET) if cell.two_clocks else (1.0, 0.0)
    when = offset + ratio * run.angle.time - cell.model.delay

    def angle(response: HeldResponse) -> np.ndarray:
        return cell.model.gain * response.mean_and_rate(when, run.angle.exposure * ratio)[0]

    held = drive(cell, variant)
    plain = Drive.from_samples(held.voltage, start=float(held.time[0]), interval=float(held.time[1]), smooth=False)
    noise = run.angle.angle - angle(HeldResponse(plain, cell.model.natural_frequency, cell.model.damping_ratio))
    return replace(run, angle=replace(run.angle, angle=angle(lagging(cell, variant)) + (noise if noisy else 0.0)))


def noncentrality(cell: Cell) -> float:
    """Sum of squares that the pole leaves in the best second-order fit, over the noise variance, mean of five seeds."""
    left = []
    for seed in range(5):
        record = Record.from_run(with_pole(cell, seed, noisy=False))
        vector = cell.truth + np.array([0, 0, 0, 1 / (2 * np.pi * POLE)])
        start = MotionParameters(
            model=SecondOrder.from_vector(vector), clock_ratio=RATIO if cell.two_clocks else 1.0
        )
        fit = refine(record, start)
        left.append(np.nan if fit is None else fit.sum_of_squares / NOISE**2)
    return float(np.mean(left))


def one(job: tuple[Cell, int, bool]) -> tuple[float, str | None]:
    """p-value of the adequacy test and the structure named."""
    cell, seed, pole = job
    adequacy = identify(with_pole(cell, seed) if pole else record_run(cell, seed)).model.adequacy
    return adequacy.p_value, adequacy.better_structure


def main() -> None:
    """Parse, run, print."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--records", type=int, default=1000)
    parser.add_argument("--pole-records", type=int, default=200)
    parser.add_argument("--damping", type=float, nargs="+", default=[0.12])
    parser.add_argument("--kind", nargs="+", choices=KINDS, default=list(KINDS))
    parser.add_argument("--clocks", nargs="+", choices=["one", "two"], default=["two"])
    parser.add_argument("--noise", choices=["white", "coloured"], default="white")
    parser.add_argument("--processes", type=int, default=None)
    wanted = parser.parse_args()
    if not set(wanted.damping) <= set(DAMPING):
        print(f"note: the grid of accuracy.py is {DAMPING}")
    print(f"{'zeta':>5} {'excitation':11}{'clocks':7}{'false alarms %':>15}{'pole found %':>13}{'named pole %':>13}"
          f"{'lambda':>8}{'ideal %':>8}{'ours %':>7}")  # fmt: skip
    alarms, records = 0, 0
    with Pool(wanted.processes) as pool:
        for z in wanted.damping:
            for kind in wanted.kind:
                for clocks in wanted.clocks:
                    cell = Cell(damping=z, kind=kind, two_clocks=clocks == "two", noise=wanted.noise)
                    good = pool.map(one, [(cell, seed, False) for seed in range(wanted.records)], chunksize=5)
                    bad = pool.map(one, [(cell, seed, True) for seed in range(wanted.pole_records)], chunksize=5)
                    called = np.array([p < 0.05 for p, _ in good])
                    alarms, records = alarms + int(called.sum()), records + len(called)
                    found = np.array([p < 0.05 for p, _ in bad]) if bad else np.array([np.nan])
                    named = np.array([n == "extra pole" for _, n in bad]) if bad else np.array([np.nan])
                    signal = noncentrality(cell) if cell.noise == "white" else float("nan")
                    reach = [100 * norm.cdf(np.sqrt(signal) - z) for z in (1.645, 1.960)]
                    print(f"{cell.damping:5g} {kind:11}{clocks:7}{100 * called.mean():15.1f}{100 * found.mean():13.1f}"
                          f"{100 * named.mean():13.1f}{signal:8.1f}{reach[0]:8.1f}{reach[1]:7.1f}",
                          flush=True)  # fmt: skip
    low, high = binom.ppf([0.025, 0.975], records, 0.05) / max(records, 1)
    print(f"false alarms over all {records} adequate records: {100 * alarms / max(records, 1):.1f} % "
          f"(5 % would give {100 * low:.1f} to {100 * high:.1f} % in 95 of 100 such runs)")  # fmt: skip


if __name__ == "__main__":
    main()
