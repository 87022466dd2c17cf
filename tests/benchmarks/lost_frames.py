"""Are frames lost without a gap found, and mis-tracked frames left out?

60 s of the vane of `accuracy.py` (two clocks, 60 frames/s, 2 % of the frames lost with a gap): five further frames
lost with the stamps closed
up; none lost; 1 % of the frames off by 20 deg. Printed: share of records in which all five were found to within 0.2 s,
share with
a false find, outliers left out and planted, and the rms error over the Cramér-Rao bound of the clean record.

    python tests/benchmarks/lost_frames.py [records] [processes]
"""

from __future__ import annotations

import sys
from dataclasses import replace
from multiprocessing import Pool

import numpy as np
from accuracy import KINDS, Cell, bound, record_run

from freqid.estimate.identification import identify

CASES = (("five lost", 5, 0.0), ("none lost", 0, 0.0), ("1 % off by 20 deg", 0, 0.01))


def one(job: tuple[Cell, int, int, float]) -> np.ndarray:
    """All found (0/1), finds, outliers left out, outliers planted, errors over bounds."""
    cell, seed, lost, share = job
    run = record_run(cell, seed)
    rng = np.random.default_rng([seed, 11])
    stamp, angle = run.angle.time.copy(), run.angle.angle.copy()
    frames = np.sort(rng.choice(np.arange(200, len(stamp) - 200), lost, replace=False))
    for k in frames:
        stamp[k + 1 :] -= 1 / 60
    off = rng.random(len(angle)) < share
    angle[off] += 20 * rng.choice([-1, 1], int(off.sum()))
    kept = np.ones(len(angle), dtype=bool)
    kept[frames] = False
    model = identify(replace(run, angle=replace(run.angle, time=stamp[kept], angle=angle[kept]))).model
    found = model.clock.silently_lost_at
    near = all(np.any(np.abs(found - t) < 0.2) for t in run.angle.time[frames])
    errors = (model.model.vector - cell.truth) / bound(cell, run)
    return np.array([near and len(found) == lost, len(found), len(model.clock.outlier_at), off.sum(), *errors])


def main() -> None:
    """Run and print."""
    records = int(sys.argv[1]) if len(sys.argv) > 1 else 100
    processes = int(sys.argv[2]) if len(sys.argv) > 2 else None
    print(f"{'':11}{'zeta':>5} {'case':18}{'all, no more':>13}{'finds':>7}{'left out':>9}{'planted':>8}   rms error / "
          f"bound")
    with Pool(processes) as pool:
        for kind in KINDS:
            for damping in (0.12, 0.5):
                for name, lost, share in CASES:
                    cell = Cell(damping=damping, kind=kind, two_clocks=True, noise="white")
                    rows = np.array(pool.map(one, [(cell, seed, lost, share) for seed in range(records)], chunksize=5))
                    mean = rows[:, :4].mean(axis=0)
                    ratio = np.sqrt(np.mean(rows[:, 4:] ** 2, axis=0))
                    print(f"{kind:11}{damping:5g} "
                          f"{name:18}{100 * mean[0]:12.0f}%{mean[1]:7.2f}{mean[2]:9.1f}{mean[3]:8.1f}   "
                          + " ".join(f"{v:.2f}" for v in ratio), flush=True)  # fmt: skip


if __name__ == "__main__":
    main()
