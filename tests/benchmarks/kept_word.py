"""Does the test measure as well as `excite` said it would?

One profile, designed for the swing-limited reference vane, is rehearsed many times on the rig of its sheet (two
clocks, stamps that jitter as those of `rehearse` do, no lost frames). Printed per parameter: scatter of the estimates
over the standard uncertainty predicted, with the standard uncertainty of that ratio, 1 / sqrt(2 (N - 1)) of it for N
normal estimates; beside it the same for an ideal estimator that knows the rig and answers the very noise that was
drawn, linearly (what chance did to these seeds); and the mean error in predicted uncertainties.

    python tests/benchmarks/kept_word.py [--seeds 200] [--first 0] [--jitter 0.0005]
"""

from __future__ import annotations

import argparse
import tempfile
from dataclasses import replace
from pathlib import Path

import numpy as np

from freqid.capture.simulated_rig import simulate_run
from freqid.estimate.identification import identify
from freqid.estimate.motion import estimate_motion
from freqid.estimate.record import Record
from freqid.rig import read_rig
from freqid.second_order import PARAMETER_ORDER
from freqid.stages.excite import ExciteSettings, design_excitation
from freqid.test_folder import TestFolder

SHEET = """
[rig]
name = "swing-limited vane"
angle_unit = "deg"
[limits]
voltage = 5.0
slew_rate = 500.0
angle = 30.0
[output]
sample_rate = 1000.0
hold = "zero-order"
full_scale = 10.0
[angle_sensor]
sample_rate = 60.0
exposure = 0.004
stamp = "end"
noise = 0.3
[step_test]
gain = 12.0
natural_frequency = 3.0
damping_ratio = 0.12
delay = 0.02
[simulated]
clock_ratio_ppm = 200.0
clock_offset = -0.35
lost_frames = 0.0
jitter = {jitter!r}
"""


def main() -> None:
    """Print the scatter over the prediction, parameter by parameter."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--seeds", type=int, default=200)
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument("--jitter", type=float, default=0.0005)
    arguments = parser.parse_args()
    n_seeds: int = arguments.seeds
    with tempfile.TemporaryDirectory() as scratch:
        folder = TestFolder(Path(scratch))
        folder.rig.write_text(SHEET.format(jitter=arguments.jitter), encoding="utf-8")
        design = design_excitation(folder, ExciteSettings(band=(0.2, 12.0), duration=60.0), draw=False)
        rig = read_rig(folder.rig)
    quiet = replace(rig, simulated=replace(rig.simulated, noise=0.0))
    estimates, answers, ideal = [], [], None
    for seed in range(arguments.first, arguments.first + n_seeds):
        run, clean = (
            simulate_run(design.profile, sheet, kind="response", name="rehearsal", rng=np.random.default_rng(seed))
            for sheet in (rig, quiet)
        )
        estimates.append(identify(run).model.model.vector)
        if ideal is None:  # stamps that jitter by a thousandth of a period change it by less than a per cent
            ideal = np.linalg.pinv(estimate_motion(Record.from_run(run)).weighted.fit.prediction.jacobian)[:4]
        answers.append(ideal @ (run.angle.angle - clean.angle.angle))
    scatter, chance = np.std(estimates, axis=0, ddof=1), np.std(answers, axis=0, ddof=1)
    doubt = 1 / np.sqrt(2 * (n_seeds - 1))
    truth = np.array([getattr(rig.simulated, name) for name in PARAMETER_ORDER])
    truth[3] -= rig.simulated.clock_offset  # the delay is that of rig and clocks together
    error = np.mean(estimates, axis=0) - truth
    print(f"{n_seeds} seeds, jitter {arguments.jitter:g} s: scatter over predicted standard uncertainty")
    for index, name in enumerate(PARAMETER_ORDER):
        quantity = design.prediction.expected[name]
        if quantity is None:
            raise SystemExit(f"{name}: no uncertainty was predicted")
        predicted = quantity.standard_uncertainty
        ratio = scatter[index] / predicted
        print(f"  {name:18s} {ratio:.3f} ± {ratio * doubt:.3f}   ideal {chance[index] / predicted:.3f}"
              f"   mean error {error[index] / predicted:+.3f}   (predicted {predicted:.4g} {quantity.unit})")


if __name__ == "__main__":
    main()
