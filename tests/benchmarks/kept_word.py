"""Does the test measure as well as `excite` said it would?

One profile, designed for the swing-limited reference vane, is rehearsed many times on the rig of its sheet (two
clocks, no lost frames). The prediction knows the noise that the sheet states; stamps that jitter, as those of
`rehearse` do unless told (0.5 ms rms), add to it: --jitter. Printed per parameter: scatter of the estimates over the
standard uncertainty predicted, with the standard uncertainty of that ratio, 1 / sqrt(2 (N - 1)) of it for N normal
estimates, and the mean error in predicted uncertainties.

    python tests/benchmarks/kept_word.py [--seeds 200] [--jitter 0]
"""

from __future__ import annotations

import argparse
import tempfile
from pathlib import Path

import numpy as np

from freqid.capture.simulated_rig import simulate_run
from freqid.estimate.identification import identify
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
    parser.add_argument("--jitter", type=float, default=0.0)
    arguments = parser.parse_args()
    n_seeds: int = arguments.seeds
    with tempfile.TemporaryDirectory() as scratch:
        folder = TestFolder(Path(scratch))
        folder.rig.write_text(SHEET.format(jitter=arguments.jitter), encoding="utf-8")
        design = design_excitation(folder, ExciteSettings(band=(0.2, 12.0), duration=60.0), draw=False)
        rig = read_rig(folder.rig)
    estimates = []
    for seed in range(n_seeds):
        run = simulate_run(design.profile, rig, kind="response", name="rehearsal", rng=np.random.default_rng(seed))
        estimates.append(identify(run).model.model.vector)
    scatter = np.std(estimates, axis=0, ddof=1)
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
        print(f"  {name:18s} {ratio:.3f} ± {ratio * doubt:.3f}   mean error {error[index] / predicted:+.3f}"
              f"   (predicted {predicted:.4g} {quantity.unit})")  # fmt: skip


if __name__ == "__main__":
    main()
