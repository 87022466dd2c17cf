"""How much rig time does the design save? The damping ratio's uncertainty from the exported file, beside plain scripts.

Two vanes of 12 deg/V, 3 Hz, damping ratio 0.12, delay 20 ms, read at 60 frames/s with 0.3 deg of noise for 60 s, band
0.2 to 12 Hz, output 1000 Hz: one limited by its stops (5 V, 30 deg), one by its voltage (1 V, 200 deg), each with the
step test exact and with natural frequency ±5 % and damping ratio ±20 %. Everything is scaled to the same limits over
the same rigs, and every standard uncertainty is the bound of `excitation.information` with rest angle and clock ratio
unknown, relative to the ratio. The plain scripts: a flat multisine of random phases (median of 20 seeds), a sweep 0.3
to 12 Hz, steps from side to side every 3 s. Also printed: the rig time for the design's uncertainty (it goes with the
square), and the time of a design of 10 minutes.

    python tests/benchmarks/rig_time.py
"""

from __future__ import annotations

import tempfile
import time
from pathlib import Path

import numpy as np

from excitation import (
    Limits,
    MultisineSettings,
    Profile,
    SensorSettings,
    SweptSineSettings,
    design_multisine,
    design_swept_sine,
    predicted_uncertainties,
    read_profile,
    scaled_to_limits,
)
from freqid.rig import Rig, read_rig
from freqid.second_order import SecondOrder
from freqid.stages.excite import ExciteSettings, design_excitation
from freqid.stages.planned_rig import limits_of, rigs_of_the_box
from freqid.test_folder import TestFolder

TRUE = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
SENSOR = SensorSettings(sample_rate=60.0, exposure=0.004, noise=0.3)
SHEET = """
[rig]
name = "spring-centred vane"
angle_unit = "deg"
[limits]
voltage = {voltage}
slew_rate = 500.0
angle = {angle}
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
gain_uncertainty = 0.0
natural_frequency_uncertainty = {natural_frequency}
damping_ratio_uncertainty = {damping_ratio}
"""
VANES = {"swing-limited": (5.0, 30.0), "voltage-limited": (1.0, 200.0)}
PRIORS = {"exact": (0.0, 0.0), "uncertain": (0.05, 0.20)}
TARGETS = {  # per cent
    ("swing-limited", "exact"): 0.052,
    ("swing-limited", "uncertain"): 0.062,
    ("voltage-limited", "exact"): 0.044,
    ("voltage-limited", "uncertain"): 0.058,
}


def per_cent(profile: Profile) -> float:
    """Relative standard uncertainty of the damping ratio in per cent."""
    return 100 * predicted_uncertainties(profile, TRUE, SENSOR).damping_ratio / TRUE.damping_ratio


def folder_of(path: Path, vane: str, prior: str) -> TestFolder:
    """A test folder with the sheet of one vane."""
    voltage, angle = VANES[vane]
    frequency, damping = PRIORS[prior]
    path.mkdir()
    sheet = SHEET.format(voltage=voltage, angle=angle, natural_frequency=frequency, damping_ratio=damping)
    (path / "rig.toml").write_text(sheet, encoding="utf-8")
    return TestFolder.existing(path)


def designed(folder: TestFolder, duration: float = 60.0) -> Profile:
    """What `excite` exports as CSV."""
    design_excitation(folder, ExciteSettings(band=(0.2, 12.0), duration=duration))
    return read_profile(folder.profile_csv)


def plain(rig: Rig) -> dict[str, float]:
    """Per cent reached by the plain scripts within the same limits."""
    limits: Limits = limits_of(rig)
    rigs = rigs_of_the_box(rig)
    flat = [
        design_multisine(MultisineSettings(
            band=(0.2, 12.0), duration=60.0, sample_rate=1000.0, limits=limits, rigs=rigs, phases="random", 
            grid="full", seed=seed,
        ))
        for seed in range(20)
    ]  # fmt: skip
    sweep = design_swept_sine(
        SweptSineSettings(band=(0.3, 12.0), duration=60.0, sample_rate=1000.0, limits=limits, rigs=rigs)
    )
    side = np.where(np.arange(60_000) // 3000 % 2 == 0, 1.0, -1.0)
    side[-3000:] = 0.0
    ramped = np.convolve(np.concatenate([np.zeros(20), side]), np.full(20, 1 / 20), mode="valid")[:60_000]  # 2 V in 20 ms
    steps = scaled_to_limits(
        Profile(voltage=ramped, sample_rate=1000.0, hold="zero-order", bias=0.0, kind="step"), limits, rigs
    )
    return {
        "flat multisine": float(np.median([per_cent(profile) for profile in flat])),
        "sweep": per_cent(sweep),
        "steps": per_cent(steps),
    }


def main() -> None:
    """Print every figure."""
    with tempfile.TemporaryDirectory() as scratch:
        for vane in VANES:
            for prior in PRIORS:
                folder = folder_of(Path(scratch) / f"{vane}-{prior}", vane, prior)
                begin = time.perf_counter()
                profile = designed(folder)
                took = time.perf_counter() - begin
                reached = per_cent(profile)
                print(f"{vane}, prior {prior}: {reached:.4f} % (target {TARGETS[vane, prior]} %), crest factor"
                      f" {profile.crest_factor:.3f}, designed in {took:.1f} s")  # fmt: skip
                for name, other in plain(read_rig(folder.rig)).items():
                    print(f"    {name:15s} {other:.4f} %, needs {(other / reached) ** 2:.2f} times the rig time")
        folder = folder_of(Path(scratch) / "long", "swing-limited", "uncertain")
        begin = time.perf_counter()
        designed(folder, duration=600.0)
        print(f"10 minutes at 1 kHz: designed and exported in {time.perf_counter() - begin:.1f} s")


if __name__ == "__main__":
    main()
