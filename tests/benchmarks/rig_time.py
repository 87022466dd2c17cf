"""How much rig time does the design save? The damping ratio's uncertainty from the exported file, beside plain scripts.

Two vanes of 12 deg/V, 3 Hz, damping ratio 0.12, delay 20 ms, read at 60 frames/s with 0.3 deg of noise for 60 s, band
0.2 to 12 Hz, output 1000 Hz: one limited by its stops (5 V, 30 deg), one by its voltage (1 V, 200 deg), each with the
step test exact and with natural frequency ±5 % and damping ratio ±20 %. Every standard uncertainty is the bound of
`excitation.information` with rest angle and clock ratio unknown, relative to the ratio.

The design keeps 0.9 of the way to the stops for every rig of the box, the slew limit, and rests at both ends. The plain
scripts are given more: the whole way to the stops of the one true rig, no slew limit, driven from the first to the last
sample. A flat multisine of random phases (period 5 s, median of 20 seeds), an exponential sweep of one amplitude from
0.3 to 12 Hz, steps from side to side every 3 s. Where both clocks are one, which spares the ratio, is printed too.
Rig times for equal uncertainty go with the square of the uncertainty.

The information bound: lines at 0.05 Hz, driven all 60 s without rest or ramp, crest factor sqrt 2 in voltage and angle,
the rig, the clocks and the rest angle known, the same limits. With the D-optimal power the determinant of the
information about the four parameters is largest; the share is the fourth root of the ratio of determinants (the usual
efficiency of a design: the part of the rig time that the bound would need). With the power that is best for the
damping ratio alone the share is that of its variances. A crest factor below sqrt 2, which many lines together can have
(1.25 and less), passes 100 %.

Sources of the algorithm: V. V. Fedorov, Theory of Optimal Experiments (1972), chapter 2; D. M. Titterington, Proc.
Conf. Information Sciences and Systems (1976) 213-216.

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
    Profile,
    SensorSettings,
    exponential_sweep,
    multisine_waveform,
    predicted_uncertainties,
    random_phases,
    read_profile,
    scaled_to_limits,
)
from freqid.second_order import SecondOrder
from freqid.stages.excite import ExciteSettings, design_excitation
from freqid.stages.planned_rig import SWING_MARGIN
from freqid.test_folder import TestFolder

TRUE = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
SENSOR = SensorSettings(sample_rate=60.0, exposure=0.004, noise=0.3)
ONE_CLOCK = SensorSettings(sample_rate=60.0, exposure=0.004, noise=0.3, clock_known=True)
RATE, N_SAMPLES = 1000.0, 60_000
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


def per_cent(profile: Profile, sensor: SensorSettings = SENSOR) -> float:
    """Relative standard uncertainty of the damping ratio in per cent."""
    return 100 * predicted_uncertainties(profile, TRUE, sensor).damping_ratio / TRUE.damping_ratio


def folder_of(path: Path, vane: str, prior: str) -> TestFolder:
    """A test folder with the sheet of one vane."""
    voltage, angle = VANES[vane]
    frequency, damping = PRIORS[prior]
    path.mkdir()
    sheet = SHEET.format(voltage=voltage, angle=angle, natural_frequency=frequency, damping_ratio=damping)
    (path / "rig.toml").write_text(sheet, encoding="utf-8")
    return TestFolder.existing(path)


def export(folder: TestFolder, duration: float = 60.0) -> None:
    """Design and write, as `excite` does but for the figure."""
    design_excitation(folder, ExciteSettings(band=(0.2, 12.0), duration=duration), draw=False)


def designed(folder: TestFolder) -> Profile:
    """What is exported as CSV."""
    export(folder)
    return read_profile(folder.profile_csv)


def plain(vane: str) -> dict[str, Profile]:
    """What plain scripts would play, by name; of the flat multisine the one of median uncertainty."""
    flat = [_at_the_limits(_flat(seed), vane) for seed in range(20)]
    flat.sort(key=per_cent)
    time_axis = np.arange(N_SAMPLES) / RATE
    side = np.where(np.arange(N_SAMPLES) // 3000 % 2 == 0, 1.0, -1.0)
    return {
        "flat multisine": flat[10],
        "sweep": _at_the_limits(exponential_sweep(time_axis, band=(0.3, 12.0), duration=60.0), vane),
        "steps": _at_the_limits(side, vane),
    }


def _flat(seed: int) -> NDArray[np.float64]:
    harmonics = np.arange(1, 61)  # multiples of 0.2 Hz
    lines = np.exp(1j * random_phases(harmonics.size, rng=np.random.default_rng(seed)))
    return np.tile(multisine_waveform(lines, harmonics=harmonics, n_samples=5000), 12)


def _at_the_limits(voltage: NDArray[np.float64], vane: str) -> Profile:
    highest, angle = VANES[vane]
    profile = Profile(voltage=voltage, sample_rate=RATE, hold="zero-order", bias=0.0, kind="other")
    return scaled_to_limits(profile, Limits(voltage=highest, slew_rate=np.inf, angle=angle), [TRUE], margin=1.0)


def bounds(vane: str) -> tuple[NDArray[np.float64], float]:
    """Information matrix of largest determinant, (4, 4), and the least uncertainty of the damping ratio in per cent.

    Over all weights of the two limits, those that leave the least: what both allow together.
    """
    highest, stops = VANES[vane]
    lines = np.arange(4, 241) * 0.05
    held = np.sinc(lines / RATE) * np.sinc(lines * SENSOR.exposure)
    seen = TRUE.sensitivity(lines) * held[:, np.newaxis]
    # a line of amplitude a: n samples times a^2 / 2, over the variance of the noise
    each = np.real(seen[:, :, np.newaxis] * np.conj(seen[:, np.newaxis, :]))
    each *= 60.0 * SENSOR.sample_rate / 2 / SENSOR.noise**2
    angle = np.abs(TRUE.response(lines)) * np.sinc(lines / RATE)
    # crest factor sqrt 2: the squares of the amplitudes add up to the square of the peak
    costs = np.array([np.full(lines.size, highest**-2.0), (angle / (SWING_MARGIN * stops)) ** 2])
    mixed = [np.array([part, 1 - part]) @ costs for part in np.linspace(0, 1, 21)]
    by_determinant = [_optimal(each, cost, np.eye(4)) for cost in mixed]
    for_damping = [_optimal(each, cost, np.diag([0.0, 0.0, 1.0, 0.0])) for cost in mixed]
    least = min(by_determinant, key=lambda information: float(np.linalg.slogdet(information)[1]))
    variance = max(float(np.linalg.inv(information)[2, 2]) for information in for_damping)
    return least, float(100 * np.sqrt(variance) / TRUE.damping_ratio)


def _optimal(each: NDArray[np.float64], cost: NDArray[np.float64], wanted: NDArray[np.float64]) -> NDArray[np.float64]:
    """Information matrix with the best powers that cost 1 in all; `each` (F, 4, 4) for unit power.

    `wanted` the unit matrix: of largest determinant; with one 1 on its diagonal: of least variance of that parameter.
    """
    every = bool(np.all(np.diag(wanted) == 1))
    power = 1 / (cost * cost.size)
    for _ in range(1000):
        covariance = np.linalg.inv(np.einsum("f,fij->ij", power, each))
        weight = covariance if every else covariance @ wanted @ covariance
        gain = np.einsum("ij,fji->f", weight, each) / cost
        power = power * (gain if every else np.sqrt(gain))
        power /= cost @ power
    return np.asarray(np.einsum("f,fij->ij", power, each))


def print_shares(profile: Profile, vane: str) -> None:
    """How much of the information bound the design reaches."""
    reached = predicted_uncertainties(profile, TRUE, SENSOR)
    best, least = bounds(vane)
    distance = np.linalg.slogdet(np.linalg.inv(reached.covariance))[1] - np.linalg.slogdet(best)[1]
    alone = float(100 * np.sqrt(np.linalg.inv(best)[2, 2]) / TRUE.damping_ratio)
    print(f"    share of the information bound: {np.exp(distance / 4):.0%} (D-optimal power, itself {alone:.4f} %),"
          f" {(least / per_cent(profile)) ** 2:.0%} (power for the damping ratio alone, {least:.4f} %)")  # fmt: skip


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
                print(f"{vane}, prior {prior}: {reached:.4f} % (target {TARGETS[vane, prior]} %), with one clock"
                      f" {per_cent(profile, ONE_CLOCK):.4f} %, crest factor {profile.crest_factor:.3f}, designed in"
                      f" {took:.1f} s")  # fmt: skip
                print_shares(profile, vane)
                for name, other in plain(vane).items():
                    print(f"    {name:15s} {per_cent(other):.4f} %, with one clock {per_cent(other, ONE_CLOCK):.4f} %,"
                          f" needs {(per_cent(other) / reached) ** 2:.2f} times the rig time")  # fmt: skip
        folder = folder_of(Path(scratch) / "long", "swing-limited", "uncertain")
        for duration in (60.0, 600.0):
            begin, begin_processor = time.perf_counter(), time.process_time()
            export(folder, duration)
            took, busy = time.perf_counter() - begin, time.process_time() - begin_processor
            print(f"{duration:g} s at 1 kHz: designed and exported in {took:.1f} s, {busy:.1f} s of processor time")


if __name__ == "__main__":
    main()
