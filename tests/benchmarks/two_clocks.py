"""Do the intervals hold the truth when voltage and angle are logged on different clocks?

A vane of 12 deg/V, 3 Hz, damping ratio 0.12, delay 20 ms, driven by the profile that `excite` designs for 60 s; its
angle from a
sensor on its own clock (+150 ppm, unknown offset), 60 frames/s, exposure 8 ms, 1 ms jitter, 2 % lost frames, noise 0.3
deg.
Prints, over the seeds: mean error over its standard deviation, stated over actual uncertainty, coverage of the 95 %
intervals,
and how often the adequacy test rejects (5 % claimed).

    python tests/benchmarks/two_clocks.py [seeds] [multisine|swept-sine|step]
"""

from __future__ import annotations

import sys
from multiprocessing import Pool

import numpy as np

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
from freqid.second_order import PARAMETER_ORDER, SecondOrder

TRUE = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
OFFSET = -0.35
SENSOR = SimulatedSensor(
    sample_rate=60.0, exposure=0.008, noise=0.3, jitter=0.001, lost_frames=0.02,
    clock_ratio=1.00015, clock_offset=OFFSET,
)
LIMITS = Limits(voltage=5.0, slew_rate=500.0, angle=30.0)


def profile(kind: str, seed: int):  # type: ignore[no-untyped-def]
    """The 60 s profile of one kind, as `excite` would design it."""
    if kind == "multisine":
        return design_multisine(
            MultisineSettings(
                band=(0.3, 12.0), duration=60.0, sample_rate=1000.0, limits=LIMITS, rigs=(TRUE,), seed=seed
            )
        )
    if kind == "swept-sine":
        return design_swept_sine(
            SweptSineSettings(band=(0.3, 12.0), duration=60.0, sample_rate=1000.0, limits=LIMITS, rigs=(TRUE,))
        )
    return design_step_sequence(StepSettings(sample_rate=1000.0, limits=LIMITS, duration=60.0, rigs=(TRUE,)))


def one(job: tuple[str, int]) -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
    """Error, standard uncertainty, held or not of the four parameters, and the p-value of the adequacy test."""
    kind, seed = job
    rig = SimulatedRig(model=TRUE, sensor=SENSOR)
    drive = input_from_profile(profile(kind, seed % 20))
    run = rig.run(drive, kind="response", name=f"seed {seed}", rng=np.random.default_rng(1000 + seed))
    model = identify(run).model
    truth = TRUE.vector - np.array([0, 0, 0, OFFSET])  # the delay contains the offset: delay - offset
    quantities = list(model.parameters.values())
    held = [q is not None and q.interval_95[0] <= t <= q.interval_95[1] for q, t in zip(quantities, truth, strict=True)]
    return model.model.vector - truth, np.sqrt(np.diag(model.covariance)), np.array(held), model.adequacy.p_value


def main() -> None:
    """Run and print."""
    seeds = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    kind = sys.argv[2] if len(sys.argv) > 2 else "multisine"
    with Pool() as pool:
        results = pool.map(one, [(kind, seed) for seed in range(seeds)], chunksize=4)
    error, stated, held, p_values = (np.array(column) for column in zip(*results, strict=True))
    print(f"{kind}, {seeds} seeds")
    print(f"{'':20}{'mean error / s.d.':>20}{'stated / s.d.':>16}{'s.d.':>12}{'coverage':>10}")
    for i, name in enumerate(PARAMETER_ORDER):
        deviation = error[:, i].std(ddof=1)
        print(
            f"{name:20}{error[:, i].mean() / deviation:20.3f}{stated[:, i].mean() / deviation:16.3f}"
            f"{deviation:12.3g}{100 * held[:, i].mean():9.1f}%"
        )
    print(f"adequacy rejected: {100 * np.mean(p_values < 0.05):.1f} %")


if __name__ == "__main__":
    main()
