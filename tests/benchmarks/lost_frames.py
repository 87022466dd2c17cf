"""Are frames lost without a gap found, and mis-tracked frames left out?

60 s of the vane of `accuracy.py` (two clocks, 60 frames/s, 2 % of the frames lost with a gap): five further frames
lost with the stamps closed up; none lost; 1 % of the frames off by 20 deg. Printed: share of records in which exactly
the planted number was found; of the losses in these, the share placed to within 0.2 s, the share with a 95 % interval
below 0.4 s (of the others the record does not tell the instant: the angle stood still), and the share inside their
intervals; mean number of finds; outliers left out and planted; rms error over the Cramér-Rao bound of the clean record.

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
    """Right number (0/1); shares of losses found to 0.2 s, with a narrow interval, inside theirs; finds; outliers left
    out and planted; errors over bounds.
    """
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
    found, between = model.clock.silently_lost_at, model.clock.silently_lost_between
    near, telling, inside = np.full(3, np.nan)
    if lost and len(found) == lost:
        # an instant is that of the lost frame; the interval runs between the frames that were kept
        true = run.angle.time[frames]
        near = np.mean(np.abs(found - true) < 0.2)
        narrow = np.diff(between, axis=1)[:, 0] < 0.4
        telling = np.mean(narrow)
        inside = np.mean((between[:, 0] - 0.003 <= true) & (true <= between[:, 1] + 0.003))
    errors = (model.model.vector - cell.truth) / bound(cell, run)
    shares = [len(found) == lost, near, telling, inside]
    return np.array([*shares, len(found), len(model.clock.outlier_at), off.sum(), *errors])


def main() -> None:
    """Run and print."""
    records = int(sys.argv[1]) if len(sys.argv) > 1 else 100
    processes = int(sys.argv[2]) if len(sys.argv) > 2 else None
    print(f"{'':11}{'zeta':>5} {'case':18}{'number':>7}{'0.2 s':>7}{'narrow':>7}{'inside':>7}{'finds':>7}"
          f"{'left out':>9}{'planted':>8}   rms error / bound")  # fmt: skip
    with Pool(processes) as pool:
        for kind in KINDS:
            for damping in (0.12, 0.5):
                for name, lost, share in CASES:
                    cell = Cell(damping=damping, kind=kind, two_clocks=True, noise="white")
                    rows = np.array(pool.map(one, [(cell, seed, lost, share) for seed in range(records)], chunksize=5))
                    told = [np.nanmean(c) if np.any(np.isfinite(c)) else np.nan for c in rows[:, :4].T]
                    mean = rows[:, 4:7].mean(axis=0)
                    ratio = np.sqrt(np.mean(rows[:, 7:] ** 2, axis=0))
                    shown = [f"{100 * v:6.0f}%" if np.isfinite(v) else f"{'-':>7}" for v in told]
                    print(f"{kind:11}{damping:5g} {name:18}" + "".join(shown)
                          + f"{mean[0]:7.2f}{mean[1]:9.1f}{mean[2]:8.1f}   "
                          + " ".join(f"{v:.2f}" for v in ratio), flush=True)  # fmt: skip


if __name__ == "__main__":
    main()
