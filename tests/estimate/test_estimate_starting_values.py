"""The starts of the fit: among them one near the rig, wherever the voltage ends."""

from __future__ import annotations

import numpy as np
import pytest

from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor
from freqid.estimate.record import Record
from freqid.estimate.record_fit import fit_record
from freqid.estimate.starting_values import FREQUENCY_RATIO, starting_values
from freqid.records import InputStream
from freqid.second_order import SecondOrder

VANE = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)


def stepped(levels: list[float], *, common_clock: bool) -> Record:
    """A step record of 3 s a level, with 0.1 deg of noise."""
    time = np.arange(0, 3.0 * len(levels), 0.01)
    voltage = np.repeat(levels, 300)
    sensor = SimulatedSensor(sample_rate=60.0, exposure=0.004, noise=0.1, common_clock=common_clock)
    drive = InputStream(time=time, voltage=voltage, hold="zero-order", commanded=True)
    run = SimulatedRig(model=VANE, sensor=sensor).run(drive, kind="step", name="s", rng=np.random.default_rng(1))
    return Record.from_run(run)


@pytest.mark.parametrize("common_clock", [True, False])
@pytest.mark.parametrize(
    "levels", [[0, 1, 0, 1], [0, 1], [0, 1, 2, 3], [0, -1, -2, -1.5], [2, 3, 2, 3], [0, 1, 0, -1, 0]]
)
def test_a_start_lies_near_the_rig_wherever_the_voltage_ends(levels: list[float], common_clock: bool) -> None:
    """One start stands within a step of the frequency grid, and the fit arrives."""
    record = stepped(levels, common_clock=common_clock)
    starts = starting_values(record)
    nearest = min(abs(np.log(start.model.natural_frequency / VANE.natural_frequency)) for start in starts)
    assert nearest <= 1.01 * np.log(FREQUENCY_RATIO)
    model = fit_record(record).parameters.model
    # 0.1 deg of noise on steps of 12 deg: each of a few dozen frames of ringing tells the damping to some per cent
    assert model.damping_ratio == pytest.approx(VANE.damping_ratio, rel=0.05)
    assert model.natural_frequency == pytest.approx(VANE.natural_frequency, rel=0.01)
