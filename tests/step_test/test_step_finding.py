"""Steps are found where they are, ramps and noise included, and what is no step is refused."""

from __future__ import annotations

import numpy as np
import pytest

from freqid.errors import StepTestError
from freqid.held_response import Drive
from freqid.records import InputStream
from freqid.step_test.steps import VoltageStep, find_steps

RATE = 100.0


def drive(voltage: np.ndarray, *, smooth: bool = False, start: float = 0.0) -> Drive:
    """Samples at 100 Hz."""
    return Drive.from_samples(voltage, start=start, interval=1 / RATE, smooth=smooth)


def levels(*values: float, hold: int = 200) -> np.ndarray:
    """Each level held for `hold` samples."""
    return np.repeat(np.array(values), hold)


def test_a_held_step_is_where_its_sample_begins() -> None:
    """Time, plateaus and levels, exactly; a voltage that starts elsewhere than zero keeps its levels."""
    (step,) = find_steps(drive(levels(1.5, 3.0), start=10.0))
    assert step == VoltageStep(time=12.0, duration=0.0, before=1.5, after=3.0, plateau_start=10.0, plateau_stop=14.0)
    assert step.change == 1.5


def test_every_step_of_a_staircase_is_found() -> None:
    """Up, down, up on both sides of the operating point."""
    steps = find_steps(drive(levels(0, 2, 0, -2, 0)))
    assert [s.time for s in steps] == [2.0, 4.0, 6.0, 8.0]
    assert [s.change for s in steps] == [2.0, -2.0, -2.0, 2.0]
    assert [(s.plateau_start, s.plateau_stop) for s in steps] == [(0, 4), (2, 6), (4, 8), (6, 10)]


@pytest.mark.parametrize("ramp", [2, 5, 9])
def test_a_ramp_under_a_slew_limit_is_one_step_at_its_middle(ramp: int) -> None:
    """`ramp` equal rises of held samples: on average they come (ramp - 1) / 2 samples after the first."""
    voltage = np.concatenate([np.zeros(300), np.arange(1, ramp) / ramp, np.ones(300)])
    (step,) = find_steps(drive(voltage))
    assert step.time == pytest.approx((300 + (ramp - 1) / 2) / RATE)
    assert step.duration == pytest.approx((ramp - 1) / RATE)
    assert (step.before, step.after) == (0.0, 1.0)


def test_a_smooth_step_is_at_the_middle_of_its_rise() -> None:
    """A raised cosine over 8 samples, straight lines between them: its middle, to one sample."""
    rise = 0.5 - 0.5 * np.cos(np.pi * np.arange(1, 8) / 8)
    (step,) = find_steps(drive(np.concatenate([np.zeros(300), rise, np.ones(300)]), smooth=True))
    # samples 299 (0) to 307 (1): the middle is sample 303
    assert step.time == pytest.approx(303 / RATE, abs=1 / RATE)


def test_a_noisy_measured_voltage_keeps_its_steps() -> None:
    """Converter noise of 0.5 % of the step makes no steps of its own and moves none by more than a sample."""
    rng = np.random.default_rng(1)
    steps = find_steps(drive(levels(0, 1, 0, -1) + 0.005 * rng.standard_normal(800)))
    np.testing.assert_allclose([s.time for s in steps], [2, 4, 6], atol=1.5 / RATE)
    # a level is a median of some 200 samples: 1.25 * 0.005 / sqrt(200), five times, both sides
    np.testing.assert_allclose([s.change for s in steps], [1, -1, -1], atol=5 * 2 * 1.25 * 0.005 / np.sqrt(200))


def test_the_designed_sequence_is_found_whole(short_steps: InputStream) -> None:
    """As many steps as the profile has, of one size, alternating about the operating point."""
    source = Drive.from_samples(short_steps.voltage, start=0.0, interval=1 / 500, smooth=False)
    found = find_steps(source)
    sizes = np.array([s.change for s in found])
    np.testing.assert_allclose(np.abs(sizes), np.abs(sizes[0]), rtol=1e-9)
    assert len(found) >= 4
    assert abs(found[-1].after) < 1e-12
    assert sizes.sum() == pytest.approx(0.0, abs=1e-12)


def test_ripple_below_five_percent_is_no_step() -> None:
    """A level that moves by 4 % of the whole range belongs to its plateau; 6 % is a step."""
    assert len(find_steps(drive(levels(0, 0.04, 1.0)))) == 1
    assert len(find_steps(drive(levels(0, 0.06, 1.0)))) == 2


@pytest.mark.parametrize(
    "voltage",
    [
        np.sin(2 * np.pi * np.arange(2000) / 400),
        np.linspace(0, 1, 1000),
        np.random.default_rng(2).standard_normal(1000),
    ],
    ids=["sine", "ramp", "noise"],
)
def test_what_has_no_plateau_is_refused(voltage: np.ndarray) -> None:
    """One line: what was looked for, how large, and what to do instead."""
    with pytest.raises(StepTestError) as told:
        find_steps(drive(voltage))
    limit = 0.05 * np.ptp(voltage)
    assert str(told.value) == (
        f"no step found: the voltage never changes by more than {limit:.3g} V (5 % of its range) between two plateaus; "
        "check the input column, or use `estimate` for other excitations"
    )
