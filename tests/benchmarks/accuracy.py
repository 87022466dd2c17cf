"""How close to the Cramér-Rao bound do the estimates come, and do the intervals mean what they say?

For every cell of damping ratio x excitation x clocks: 60 s of a 12 deg/V, 3 Hz vane with 20 ms delay, limits 5 V and
30 deg, 60 frames/s,
8 ms exposure, 1 ms jitter (known from the stamps), 2 % lost frames, noise 0.3 deg. Printed per parameter:
root-mean-square error
over the Cramér-Rao bound of the whole record (all nuisance parameters included), and the share of 95 % intervals that
hold
the truth. Beside it the script a competent engineer would write: interpolate to a uniform grid, segment-averaged
cross-spectrum over input spectrum, curve_fit of the gain.

    python tests/benchmarks/accuracy.py [--seeds 200] [--noise white|coloured] [--damping Z ...] [--processes N]
"""

from __future__ import annotations

import argparse
from collections.abc import Iterable
from dataclasses import dataclass, replace
from functools import lru_cache
from multiprocessing import Pool

import numpy as np
from scipy.optimize import curve_fit
from scipy.signal import csd, lfilter, welch

from excitation import (
    Limits,
    MultisineSettings,
    StepSettings,
    SweptSineSettings,
    design_multisine,
    design_step_sequence,
    design_swept_sine,
)
from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor, input_from_profile
from freqid.estimate.identification import identify
from freqid.estimate.prediction import MotionParameters, predict
from freqid.estimate.record import Record
from freqid.records import InputStream, Run
from freqid.second_order import PARAMETER_ORDER, SecondOrder

DAMPING = (0.02, 0.05, 0.12, 0.3, 0.7, 1.2)
KINDS = ("multisine", "swept-sine", "steps")
LIMITS = Limits(voltage=5.0, slew_rate=500.0, angle=30.0)
OFFSET, RATIO, NOISE = -0.35, 1.0002, 0.3


@dataclass(frozen=True)
class Cell:
    """One cell of the grid."""

    damping: float
    kind: str
    two_clocks: bool
    noise: str

    @property
    def model(self) -> SecondOrder:
        """The true rig."""
        return SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=self.damping, delay=0.02)

    @property
    def truth(self) -> np.ndarray:
        """True parameters as a log on another clock shows them: the delay less the clock offset."""
        return self.model.vector - np.array([0, 0, 0, OFFSET if self.two_clocks else 0.0])


@lru_cache(maxsize=64)
def drive(cell: Cell, variant: int) -> InputStream:
    """The profile of a cell; multisines come in five phase sets."""
    rigs, rate = (cell.model,), 1000.0
    if cell.kind == "multisine":
        profile = design_multisine(
            MultisineSettings(band=(0.3, 12.0), duration=60.0, sample_rate=rate, limits=LIMITS, rigs=rigs, seed=variant)
        )
    elif cell.kind == "swept-sine":
        profile = design_swept_sine(
            SweptSineSettings(band=(0.3, 12.0), duration=60.0, sample_rate=rate, limits=LIMITS, rigs=rigs)
        )
    else:
        profile = design_step_sequence(
            StepSettings(sample_rate=rate, limits=LIMITS, rigs=rigs, duration=60.0, hold_time=3.0)
        )
    return input_from_profile(profile)


def record_run(cell: Cell, seed: int) -> Run:
    """One simulated run of a cell."""
    white = cell.noise == "white"
    sensor = SimulatedSensor(
        sample_rate=60.0, exposure=0.008, noise=NOISE if white else 0.0, jitter=0.001, lost_frames=0.02,
        common_clock=not cell.two_clocks,
        clock_ratio=RATIO if cell.two_clocks else 1.0, clock_offset=OFFSET if cell.two_clocks else 0.0,
    )  # fmt: skip
    rng = np.random.default_rng([seed, 7])
    variant = seed % 5 if cell.kind == "multisine" else 0
    run = SimulatedRig(model=cell.model, sensor=sensor).run(
        drive(cell, variant), kind="response", name=f"seed {seed}", rng=rng
    )
    if white:
        return run
    # first-order low-pass at 1 Hz (rms 0.3 deg) and 50 Hz hum of 0.2 deg, which the frame rate folds to 10 Hz
    pole = np.exp(-2 * np.pi * 1.0 / 60.0)
    slots = np.round(run.angle.time * 60).astype(int)
    slow = lfilter([np.sqrt(1 - pole**2)], [1, -pole], rng.standard_normal(slots[-1] + 300))[300 - 1 :]
    hum = 0.2 * np.sqrt(2) * np.sin(2 * np.pi * 50 * run.angle.time + rng.uniform(0, 2 * np.pi))
    return replace(run, angle=replace(run.angle, angle=run.angle.angle + NOISE * slow[slots] + hum))


def bound(cell: Cell, run: Run) -> np.ndarray:
    """Cramér-Rao bound (standard deviations) of the four parameters for white noise, nuisance parameters included."""
    record = Record.from_run(run)
    p = MotionParameters(model=SecondOrder.from_vector(cell.truth), clock_ratio=RATIO if cell.two_clocks else 1.0)
    jacobian = predict(record, p).jacobian
    scale = np.linalg.norm(jacobian, axis=0)
    information = np.linalg.inv((jacobian / scale).T @ (jacobian / scale)) / np.outer(scale, scale)
    return NOISE * np.sqrt(np.diag(information))[:4]


def plain_script(run: Run) -> np.ndarray:
    """Gain, natural frequency, damping ratio and delay as a plain script finds them."""
    rate = 60.0
    t = np.arange(run.angle.time[0], run.angle.time[-1], 1 / rate)
    y = np.interp(t, run.angle.time, run.angle.angle)
    u = np.interp(t, run.input.time, run.input.voltage, left=0, right=0)
    f, cross = csd(u, y, rate, nperseg=1024)
    h = cross / welch(u, rate, nperseg=1024)[1]
    use = (f > 0.3) & (f < 12) if run.input.periodicity is None else np.isin(
        np.arange(len(f)), np.unique(np.round(run.input.periodicity.lines / f[1]).astype(int))
    )  # fmt: skip
    f, h = f[use], h[use]

    def gain(x: np.ndarray, k: float, fn: float, z: float) -> np.ndarray:
        return abs(k) / np.sqrt((1 - (x / fn) ** 2) ** 2 + (2 * z * x / fn) ** 2)

    try:
        (k, fn, z), _ = curve_fit(gain, f, np.abs(h), p0=[np.abs(h[0]), f[np.argmax(np.abs(h))], 0.2], maxfev=2000)
    except RuntimeError:
        return np.full(4, np.nan)
    rest = np.unwrap(np.angle(h)) + np.arctan2(2 * z * f / fn, 1 - (f / fn) ** 2)
    return np.array([abs(k), abs(fn), abs(z), -np.polyfit(f, rest, 1)[0] / (2 * np.pi)])


def one(job: tuple[Cell, int]) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, float]:
    """Error, bound, held or not, error of the plain script, p-value of the adequacy test."""
    cell, seed = job
    run = record_run(cell, seed)
    model = identify(run).model
    held = []
    for truth, quantity in zip(cell.truth, model.parameters.values(), strict=True):
        held.append(quantity is not None and quantity.interval_95[0] <= truth <= quantity.interval_95[1])
    error = model.model.vector - cell.truth
    return error, bound(cell, run), np.array(held), plain_script(run) - cell.truth, model.adequacy.p_value


def rms(values: np.ndarray) -> np.ndarray:
    """Root mean square down the columns."""
    return np.sqrt(np.mean(values**2, axis=0))


def table(cells: Iterable[Cell], seeds: int, processes: int | None) -> None:
    """Run all cells and print."""
    names = ("K", "fn", "zeta", "tau")
    print(f"{'zeta':>5} {'excitation':11}{'clocks':7}{'rms error / bound':^26}{'coverage %':^26}{'p<5%':>6}"
          f"{'  plain script, rms error / bound':^36}")  # fmt: skip
    print(f"{'':23}" + "".join(f"{n:>6}" for n in names) + "  " + "".join(f"{n:>6}" for n in names) + f"{'':8}"
          + "".join(f"{n:>8}" for n in names))  # fmt: skip
    ratios, covered = [], []
    with Pool(processes) as pool:
        for cell in cells:
            rows = pool.map(one, [(cell, seed) for seed in range(seeds)], chunksize=5)
            error, limit, held, plain, p_value = (np.array(column) for column in zip(*rows, strict=True))
            base = np.mean(limit, axis=0)
            ratio, coverage = rms(error) / base, 100 * held.mean(axis=0)
            ratios.append(ratio)
            covered.append(coverage)
            failed = np.isnan(plain).any(axis=1)
            other = rms(plain[~failed]) / base
            if cell.two_clocks:
                other[3] = np.nan  # a plain script cannot separate what it aligned by hand
            print(f"{cell.damping:5g} {cell.kind:11}{'two' if cell.two_clocks else 'one':7}"
                  + "".join(f"{v:6.2f}" for v in ratio) + "  " + "".join(f"{v:6.1f}" for v in coverage)
                  + f"{100 * np.mean(p_value < 0.05):6.1f}  " + "".join(f"{v:8.1f}" for v in other),
                  flush=True)  # fmt: skip
    pooled = np.mean(covered, axis=0)
    pairs = np.array(covered).ravel()
    print("pooled coverage: " + ", ".join(f"{n} {v:.1f} %" for n, v in zip(PARAMETER_ORDER, pooled, strict=True)))
    print(f"cell-and-parameter pairs within 91.5-98.5 %: {100 * np.mean((pairs >= 91.5) & (pairs <= 98.5)):.1f} %")
    print(f"largest rms error over bound: {np.max(ratios):.2f}")


def main() -> None:
    """Parse and run."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--seeds", type=int, default=200)
    parser.add_argument("--noise", choices=["white", "coloured"], default="white")
    parser.add_argument("--damping", type=float, nargs="+", default=list(DAMPING))
    parser.add_argument("--kind", nargs="+", choices=KINDS, default=list(KINDS))
    parser.add_argument("--processes", type=int, default=None)
    wanted = parser.parse_args()
    cells = [
        Cell(damping=z, kind=kind, two_clocks=two, noise=wanted.noise)
        for z in wanted.damping
        for kind in wanted.kind
        for two in (False, True)
    ]
    table(cells, wanted.seeds, wanted.processes)


if __name__ == "__main__":
    main()
