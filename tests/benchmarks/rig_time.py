"""How much rig time does the design save? The damping ratio's uncertainty from the exported file, beside plain scripts.

Two vanes of 12 deg/V, 3 Hz, damping ratio 0.12, delay 20 ms, read at 60 frames/s with 0.3 deg of noise for 60 s, band
0.2 to 12 Hz, output 1000 Hz: one limited by its stops (5 V, 30 deg), one by its voltage (1 V, 200 deg), each with the
step test exact and with natural frequency ±5 % and damping ratio ±20 %. Everything is scaled to the same limits over
the same rigs, and every standard uncertainty is the bound of `excitation.information` with rest angle and clock ratio
unknown, relative to the ratio. The plain scripts: a flat multisine of random phases (median of 20 seeds), a sweep 0.3
to 12 Hz, steps from side to side every 3 s. Also printed: the rig time for the design's uncertainty (it goes with the
square), the times of the designs, of 10 minutes too, and the share of the information bound. The bound is the
uncertainty of the damping ratio with the D-optimal power (all four parameters) on lines at 0.05 Hz, driven all 60 s
through without rest or ramp, crest factor sqrt 2 in voltage and angle, the rig known exactly. It is an idealisation of
the power, not the least uncertainty of the damping ratio alone: power meant for that one alone can stand above 100 %.
The share is the square of the ratio of uncertainties: the part of the rig time that the bound would need.

Source of the algorithm: V. V. Fedorov, Theory of Optimal Experiments (1972), chapter 2.

    python tests/benchmarks/rig_time.py
"""

from __future__ import annotations

import tempfile
import time
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

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
from freqid.stages.planned_rig import SWING_MARGIN, limits_of, rigs_of_the_box
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
    design_excitation(folder, ExciteSettings(band=(0.2, 12.0), duration=duration), draw=False)
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
    before = np.concatenate([np.zeros(20), side])
    ramped = np.convolve(before, np.full(20, 1 / 20), mode="valid")[:60_000]  # 2 V in 20 ms
    steps = scaled_to_limits(
        Profile(voltage=ramped, sample_rate=1000.0, hold="zero-order", bias=0.0, kind="step"), limits, rigs
    )
    return {
        "flat multisine": float(np.median([per_cent(profile) for profile in flat])),
        "sweep": per_cent(sweep),
        "steps": per_cent(steps),
    }


def bound(rig: Rig) -> float:
    """Per cent with D-optimal power: over all weights of the two limits, the one that leaves the least information."""
    limits = limits_of(rig)
    lines = np.arange(4, 241) * 0.05
    held = np.sinc(lines / 1000.0) * np.sinc(lines * SENSOR.exposure)
    seen = TRUE.sensitivity(lines) * held[:, np.newaxis]
    # a line of amplitude a: n samples times a^2 / 2, over the variance of the noise
    each = np.real(seen[:, :, np.newaxis] * np.conj(seen[:, np.newaxis, :]))
    each *= 60.0 * SENSOR.sample_rate / 2 / SENSOR.noise**2
    angle = np.abs(TRUE.response(lines)) * np.sinc(lines / 1000.0)
    # crest factor sqrt 2: the squares of the amplitudes add up to the square of the peak
    costs = np.array([np.full(lines.size, limits.voltage**-2.0), (angle / (SWING_MARGIN * limits.angle)) ** 2])
    optima = [d_optimal(each, np.array([part, 1 - part]) @ costs) for part in np.linspace(0, 1, 21)]
    covariance = np.linalg.inv(min(optima, key=lambda information: float(np.linalg.slogdet(information)[1])))
    return float(100 * np.sqrt(covariance[2, 2]) / TRUE.damping_ratio)


def d_optimal(each: NDArray[np.float64], cost: NDArray[np.float64]) -> NDArray[np.float64]:
    """Information matrix of largest determinant with powers that cost 1 in all; `each` (F, 4, 4) for unit power."""
    power = 1 / (cost * cost.size)
    for _ in range(500):
        covariance = np.linalg.inv(np.einsum("f,fij->ij", power, each))
        power = power * np.einsum("ij,fji->f", covariance, each) / (4 * cost)
        power /= cost @ power
    return np.asarray(np.einsum("f,fij->ij", power, each))


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
                least = bound(read_rig(folder.rig))
                share = (least / reached) ** 2
                print(f"    information bound (D-optimal power) {least:.4f} %: {share:.0%} of it reached")
                for name, other in plain(read_rig(folder.rig)).items():
                    print(f"    {name:15s} {other:.4f} %, needs {(other / reached) ** 2:.2f} times the rig time")
        folder = folder_of(Path(scratch) / "long", "swing-limited", "uncertain")
        for duration in (60.0, 600.0):
            begin, begin_processor = time.perf_counter(), time.process_time()
            designed(folder, duration=duration)
            took, busy = time.perf_counter() - begin, time.process_time() - begin_processor
            print(f"{duration:g} s at 1 kHz: designed and exported in {took:.1f} s, {busy:.1f} s of processor time")


if __name__ == "__main__":
    main()
