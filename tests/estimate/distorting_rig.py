"""A vane that distorts in a known way, driven by odd multisines with detection lines.

Before the rig: the voltage goes through a polynomial and stays a staircase, so the angle is exact. Behind the rig: the
angle goes through a polynomial. Either way the levels at every line follow from one noiseless steady period.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor
from freqid.records import InputStream, Periodicity, Run
from freqid.second_order import SecondOrder

Floats = NDArray[np.float64]
Curve = Callable[[Floats], Floats]
VANE = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
PERIOD, RATE, PERIODS = 4.0, 500.0, 4
TWO_CLOCKS = {"exposure": 0.008, "clock_ratio": 1.00015, "clock_offset": 0.3, "jitter": 0.001, "lost_frames": 0.02}


def straight(value: Floats) -> Floats:
    """No distortion."""
    return value


def odd_orders(highest: int, seed: int) -> NDArray[np.intp]:
    """Odd harmonics up to `highest`, one of every four left out."""
    rng, odd = np.random.default_rng(seed), np.arange(1, highest + 1, 2)
    left_out = [rng.choice(group) for group in np.array_split(odd, max(len(odd) // 4, 1))]
    return np.setdiff1d(odd, left_out)


def multisine(orders: NDArray[np.intp], seed: int, *, rms: float = 1.0, periods: int = PERIODS) -> InputStream:
    """Equal lines with random phases: a second of rest, one of run-in, whole periods, a second of rest."""
    n = int(PERIOD * RATE)
    angle = 2 * np.pi * np.outer(np.arange(n) / n, orders)
    one = np.cos(angle + np.random.default_rng(seed).uniform(0, 2 * np.pi, len(orders))).sum(axis=1)
    one *= rms / one.std()
    second = int(RATE)
    run_in = one[-second:] * np.linspace(0, 1, second)
    voltage = np.concatenate([np.zeros(second), run_in, np.tile(one, periods), np.zeros(second)])
    return InputStream(
        time=np.arange(len(voltage)) / RATE,
        voltage=voltage,
        hold="zero-order",
        commanded=True,
        periodicity=Periodicity(period=PERIOD, lines=orders / PERIOD, start=2.0, stop=2.0 + periods * PERIOD),
    )


def distorted_run(
    drive: InputStream,
    seed: int,
    *,
    before: Curve = straight,
    behind: Curve = straight,
    noise: float = 0.1,
    **sensor: float,
) -> Run:
    """What a rig that distorts before or behind its motion records: 60 frames/s, on the voltage's clock unless told."""
    facts = {"sample_rate": 60.0, "exposure": 0.0, **sensor}
    common = "clock_offset" not in sensor
    rig = SimulatedRig(model=VANE, sensor=SimulatedSensor(common_clock=common, **facts))
    bent = replace(drive, voltage=before(drive.voltage))
    run = rig.run(bent, kind="response", name=f"seed {seed}", rng=np.random.default_rng(seed))
    noisy = behind(run.angle.angle) + noise * np.random.default_rng([seed, 1]).standard_normal(len(run.angle.angle))
    return replace(run, input=drive, angle=replace(run.angle, angle=noisy))


def true_amplitudes(
    drive: InputStream, *, before: Curve = straight, behind: Curve = straight, exposure: float = 0.0
) -> Floats:
    """Amplitude of every harmonic of the angle, from 240 instants of the last period, without noise."""
    rig = SimulatedRig(model=VANE, sensor=SimulatedSensor(sample_rate=60.0, exposure=exposure))
    periodicity = drive.periodicity
    assert periodicity is not None
    instants = periodicity.stop - PERIOD + np.arange(1, 241) / 60
    angle = behind(rig.angle(replace(drive, voltage=before(drive.voltage)), instants, exposure=exposure))
    return np.asarray(np.abs(np.fft.fft(angle)) / 120)
