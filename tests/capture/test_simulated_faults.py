"""Faults planted in the rig in software, against closed forms and independent integrations."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.signal import cont2discrete, dlsim

from freqid.capture.motion_path import MotionPath
from freqid.capture.nonlinear_motion import Nonlinearity, stepped_motion
from freqid.capture.planted_faults import NO_FAULTS, PlantedFaults, angle_with_faults
from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor
from freqid.errors import CaptureError
from freqid.held_response import Drive, HeldResponse
from freqid.records import InputStream, Run
from freqid.rig import parse_rig
from freqid.rig_template import rig_sheet_text
from freqid.second_order import SecondOrder

UNDAMPED = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=1e-9, delay=0.0)
VANE = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
WN = 2 * math.pi * 3.0


def step_drive(volts: float, duration: float, *, interval: float = 1e-3) -> Drive:
    """Rest for 50 ms, then `volts`."""
    n = round(duration / interval)
    voltage = np.where(np.arange(n) * interval < 0.05, 0.0, volts)
    return Drive.from_samples(voltage, start=0.0, interval=interval, smooth=False)


def turning_points(path: MotionPath) -> np.ndarray:
    """Angles at which the rate changes its sign, each once."""
    moving = path.rate != 0
    sign = np.sign(path.rate[moving])
    inside = np.flatnonzero(sign[1:] != sign[:-1])
    angle, rate, time = path.angle[moving], path.rate[moving], path.time[moving]
    # between two knots the turning point is that of the parabola through rate and angle
    share = rate[inside] / (rate[inside] - rate[inside + 1])
    return angle[inside] + 0.5 * share * (time[inside + 1] - time[inside]) * rate[inside]


def faulty(
    drive: Drive, time: np.ndarray, *, model: SecondOrder = VANE, exposure: float = 0.0, **faults: float
) -> np.ndarray:
    """The angle at `time` with the faults given by name."""
    return angle_with_faults(drive, model, PlantedFaults(**faults), time, exposure=exposure)  # type: ignore[arg-type]


def random_drive(*, seed: int = 0, duration: float = 6.0) -> Drive:
    """A new level every 0.2 s, up to some 2 V."""
    levels = np.random.default_rng(seed).standard_normal(round(duration / 0.2))
    levels[0] = 0.0
    return Drive.from_samples(np.repeat(levels, 200), start=0.0, interval=1e-3, smooth=False)


def test_friction_takes_twice_its_angle_from_every_half_swing() -> None:
    """Closed form (Den Hartog 1931): the swing about 12 deg shrinks from 11.5 by 1 deg a half cycle, without damping.

    The parabola between two knots of 1 ms misses a turning point by (wn h)^3 / 12 of the swing, 6e-6 deg.
    """
    path = stepped_motion(step_drive(1.0, 3.0), UNDAMPED, Nonlinearity(dry_friction=0.5))
    swing = np.abs(turning_points(path)[:9] - 12.0)
    np.testing.assert_allclose(swing, 11.0 - np.arange(9), atol=2e-5)


def test_friction_holds_where_the_spring_is_weaker() -> None:
    """A rig at rest does not move for less than its static friction, and stops for good inside it."""
    held = stepped_motion(step_drive(0.05, 1.0), VANE, Nonlinearity(dry_friction=0.4, static_friction=0.61))
    assert np.all(held.angle == 0.0)
    freed = stepped_motion(step_drive(0.05, 1.0), VANE, Nonlinearity(dry_friction=0.4, static_friction=0.59))
    assert freed.angle[-1] > 0.2 - 1e-9  # it slips until the spring is inside the kinetic friction
    stopped = stepped_motion(step_drive(1.0, 4.0), VANE, Nonlinearity(dry_friction=0.5))
    assert stopped.rate[-1] == 0.0
    assert abs(stopped.angle[-1] - 12.0) <= 0.5
    assert np.ptp(stopped.angle[-500:]) == 0.0


def test_friction_equals_an_independent_integration() -> None:
    """DOP853 from reversal to reversal (events), relative tolerance 1e-10, with viscous damping too."""
    drive = step_drive(1.0, 1.2)
    path = stepped_motion(drive, VANE, Nonlinearity(dry_friction=0.3))
    time, state, direction = 0.05, np.array([0.0, 0.0]), 1.0
    zeta = VANE.damping_ratio

    def motion(_: float, y: np.ndarray) -> list[float]:
        return [y[1], WN**2 * (12.0 - y[0] - direction * 0.3) - 2 * zeta * WN * y[1]]

    def reversal(t: float, y: np.ndarray) -> float:
        return float(y[1]) if t > time + 1e-6 else direction

    reversal.terminal = True  # type: ignore[attr-defined]
    for _ in range(4):
        solved = solve_ivp(motion, (time, 1.2), state, method="DOP853", rtol=1e-10, atol=1e-10, events=reversal,
                           dense_output=True)  # fmt: skip
        asked = np.linspace(time, solved.t[-1], 20)
        # a cubic between knots misses by (wn h)^4 / 384 of the swing where the force is smooth, and by the jump of the
        # acceleration at a reversal, which falls on a knot
        np.testing.assert_allclose(path.at(asked), solved.sol(asked)[0], atol=1e-6)
        time, state, direction = float(solved.t[-1]), solved.y[:, -1] * [1, 0], -direction


@pytest.mark.parametrize(("cubic", "quadratic"), [(3e-4, 0.0), (-1e-4, 0.0), (0.0, 4e-3), (2e-4, -3e-3)])
def test_curved_spring_equals_an_independent_integration(cubic: float, quadratic: float) -> None:
    """DOP853 over three seconds of random steps; the splitting may shift the phase by (wn h)^2 / 8 of the change.

    At 25 deg the stiffness changes by 20 % at most; over 3 s, 57 rad, its frequency error of 0.1 * 0.019^2 / 8 = 4e-6
    shifts a swing of 25 deg by 57 * 4e-6 * 25 = 6e-3 deg.
    """
    drive = random_drive(duration=3.0)
    path = stepped_motion(drive, VANE, Nonlinearity(cubic=cubic, quadratic=quadratic))
    state = np.array([0.0, 0.0])
    for k in range(15):
        level = 12.0 * float(drive.value[200 * k])

        def motion(_: float, y: np.ndarray, level: float = level) -> list[float]:
            torque = y[0] * (1 + quadratic * y[0] + cubic * y[0] ** 2)
            return [y[1], WN**2 * (level - torque) - 2 * VANE.damping_ratio * WN * y[1]]

        end = 0.2 * (k + 1)
        solved = solve_ivp(motion, (end - 0.2, end), state, method="DOP853", rtol=1e-10, atol=1e-10)
        state = solved.y[:, -1]
        assert path.at(np.array([end]))[0] == pytest.approx(state[0], abs=6e-3)


def test_hardening_is_the_stiffness_at_the_angle_named() -> None:
    """Settled, torque equals voltage: theta (1 + h (theta / 30)^2) = 12 V; at 15 deg with h = 0.4: 16.5 deg asked."""
    settled = faulty(step_drive(16.5 / 12, 8.0), np.array([7.9]), spring_hardening=0.4, spring_angle=30.0)
    # exp(-0.12 wn 7.8) is 2e-8 of the swing; half kicks place the rest (wn h)^2 / 8 of the spring's 1.5 deg off
    assert settled[0] == pytest.approx(15.0, abs=1.5 * (WN * 1e-3) ** 2 / 8)


def test_a_stop_reflects_by_its_restitution_and_holds_the_rig_in_the_end() -> None:
    """Energy: hitting 8 deg on the way to 12, v^2 = wn^2 (12^2 - 4^2); back with v / 2, to 12 - hypot(4, v / 2 wn)."""
    path = stepped_motion(step_drive(1.0, 3.0), UNDAMPED, Nonlinearity(stop=8.0, restitution=0.5))
    assert path.angle.max() == 8.0
    lowest = 12 - math.hypot(4.0, 0.5 * math.sqrt(12**2 - 4**2))
    # the first way back (after 0.115 s) is the farthest; a knot lies within (wn h)^2 / 8 of the swing of it
    assert path.angle[path.time > 0.12].min() == pytest.approx(lowest, abs=12 * (WN * 1e-3) ** 2 / 8)
    assert path.angle[-1] == 8.0
    assert path.rate[-1] == 0.0


def test_a_rig_leaves_the_stop_when_the_voltage_takes_it_back() -> None:
    """Pressed against 8 deg, then released: from there on it falls freely, as a linear rig from 8 deg at rest."""
    voltage = np.concatenate([np.zeros(50), np.ones(3000), np.zeros(300)])
    drive = Drive.from_samples(voltage, start=0.0, interval=1e-3, smooth=False)
    path = stepped_motion(drive, UNDAMPED, Nonlinearity(stop=8.0))
    since = np.linspace(0.0, 0.15, 40)
    np.testing.assert_allclose(path.at(3.05 + since), 8.0 * np.cos(WN * since), atol=1e-6)


def test_a_stop_beyond_the_swing_changes_nothing() -> None:
    """Stepping without events is the linear rig: the mean over an exposure too."""
    drive = random_drive()
    time = np.linspace(0.1, 6.2, 500)
    linear = angle_with_faults(drive, VANE, NO_FAULTS, time, exposure=0.008)
    np.testing.assert_allclose(faulty(drive, time, exposure=0.008, end_stop=1e3), linear, atol=1e-7)


def test_coarse_and_smooth_drives_are_stepped_alike() -> None:
    """A drive of 10 V/s straight lines at 10 Hz, at 1 kHz and at 20 kHz: the same friction path.

    Straight lines are divided exactly, and the rig is released inside its step; at 20 kHz whole steps of 1 ms hold
    their means, which the rig sees later by (wn h)^2 / 24 and no more: 12 * 1.5e-5 of a swing of 12 deg.
    """
    level = np.array([0.0, 1.0, -1.0, 0.5, 0.0, 0.0])
    finest = np.interp(np.arange(10_001) / 20_000, np.arange(6) / 10, level)
    drives = [
        Drive.from_samples(level, start=0.0, interval=0.1, smooth=True),
        Drive.from_samples(finest[::20], start=0.0, interval=1e-3, smooth=True),
        Drive.from_samples(finest, start=0.0, interval=5e-5, smooth=True),
    ]
    time = np.linspace(0.0, 0.49, 99)
    first, second, third = (faulty(drive, time, dry_friction=0.3) for drive in drives)
    np.testing.assert_allclose(second, first, atol=1e-4)
    np.testing.assert_allclose(third, first, atol=5e-3)


def test_play_takes_half_its_gap_from_either_end() -> None:
    """Once carried to both sides, the sensor's extremes are the rig's, less half the gap."""
    drive = random_drive()
    time = np.linspace(0.0, 6.0, 60_001)
    true, seen = faulty(drive, time), faulty(drive, time, backlash=1.0)
    assert true.max() - seen.max() == pytest.approx(0.5, abs=1e-3)
    assert seen.min() - true.min() == pytest.approx(0.5, abs=1e-3)
    assert np.max(np.abs(true - seen)) <= 0.5 + 1e-3
    assert np.mean(np.diff(seen) == 0) > 0.01  # it stands still while the gap is crossed


def test_clipping_is_a_clipped_voltage() -> None:
    """The rig under the voltage clipped beforehand."""
    drive, time = random_drive(), np.linspace(0, 6, 200)
    clipped = Drive.from_samples(np.clip(drive.value, -0.7, 0.7), start=0.0, interval=1e-3, smooth=False)
    np.testing.assert_allclose(faulty(drive, time, saturation=0.7), faulty(clipped, time), atol=1e-12)


def test_unequal_gain_adds_the_response_to_the_size_of_the_voltage() -> None:
    """u + a / 2 |u|: up 1 + a / 2, down 1 - a / 2."""
    drive, time = random_drive(), np.linspace(0, 6, 200)
    size = Drive.from_samples(np.abs(drive.value), start=0.0, interval=1e-3, smooth=False)
    expected = faulty(drive, time) + 0.1 * faulty(size, time)
    np.testing.assert_allclose(faulty(drive, time, gain_asymmetry=0.2), expected, atol=1e-10)


def test_a_limited_slew_rate_makes_a_ramp() -> None:
    """A step of 1 V at 5 V/s is a straight line over 0.2 s."""
    drive, time = step_drive(1.0, 2.0), np.linspace(0, 2, 150)
    ramp = np.interp(np.arange(2000) * 1e-3, [0.05, 0.25], [0.0, 1.0])
    expected = Drive.from_samples(ramp, start=0.0, interval=1e-3, smooth=True)
    np.testing.assert_allclose(faulty(drive, time, slew_limit=5.0), faulty(expected, time), atol=1e-8)
    # a limit that is never reached leaves an eighth of a millisecond: 12 deg * wn * 1.25e-4 s at most
    np.testing.assert_allclose(faulty(drive, time, slew_limit=1e6), faulty(drive, time), atol=12 * WN * 1.3e-4)


@pytest.mark.parametrize(("pole", "tolerance"), [("sensor_pole", 1e-5), ("driver_pole", 5e-3)])
def test_a_pole_equals_the_third_order_system(pole: str, tolerance: float) -> None:
    """Zero-order-hold equivalent (scipy) of rig and pole at 8 Hz in series.

    The sensor's lag is exact but for the knots. The driver's straight lines miss a jump of up to 4 V by 2e-3 for an
    eighth of the 20 ms: 12 * wn * 4 * 2e-3 * 2.5 ms = 5e-3 deg.
    """
    drive = random_drive()
    model = replace(VANE, delay=0.0)
    numerator = [12.0 * WN**2]
    denominator = np.polymul([1.0, 2 * 0.12 * WN, WN**2], [1 / (2 * np.pi * 8.0), 1.0])
    a2, a1, a0 = denominator[1:] / denominator[0]
    dynamics = [[0, 1, 0], [0, 0, 1], [-a0, -a1, -a2]]
    continuous = (dynamics, [[0], [0], [1]], [[numerator[0] / denominator[0], 0, 0]], [[0]])
    discrete = cont2discrete(tuple(np.array(part, dtype=float) for part in continuous), 1e-3, method="zoh")
    _, expected, _ = dlsim(discrete, drive.value)
    time = np.arange(len(drive.value)) * 1e-3
    found = faulty(drive, time, model=model, **{pole: 8.0})
    np.testing.assert_allclose(found, expected[:, 0], atol=tolerance)


def test_a_second_mode_is_a_second_rig_beside_the_first() -> None:
    """Superposition, also where the motion is stepped."""
    drive, time = random_drive(), np.linspace(0.1, 6, 300)
    second = 12.0 * 0.05 * HeldResponse(drive, 8.0, 0.02).at(time - VANE.delay)
    mode = {"second_mode_frequency": 8.0, "second_mode_gain": 0.05}
    np.testing.assert_allclose(faulty(drive, time, **mode), faulty(drive, time) + second, atol=1e-10)
    stepped = faulty(drive, time, end_stop=1e3, **mode)
    # a cubic between knots of 1 ms: (w h)^4 / 384 of the second mode's swing, rounding of the path above it
    np.testing.assert_allclose(stepped, faulty(drive, time) + second, atol=1e-6)


def test_exposure_scales_and_drift_act_on_the_reading(recorded: Callable[..., Run]) -> None:
    """A hidden exposure adds to the stated one; scales multiply; the drift grows evenly from start to end."""
    drive, time = random_drive(), np.linspace(0.1, 6, 100)
    plain = faulty(drive, time, exposure=0.012)
    np.testing.assert_allclose(faulty(drive, time, exposure=0.004, hidden_exposure=0.008), plain, atol=1e-12)
    np.testing.assert_allclose(faulty(drive, time, exposure=0.012, angle_scale=1.1), 1.1 * plain, atol=1e-12)
    np.testing.assert_allclose(faulty(drive, time, exposure=0.012, voltage_scale=0.9), 0.9 * plain, atol=1e-12)
    drifting = faulty(drive, time, exposure=0.012, drift=2.0) - plain
    np.testing.assert_allclose(drifting, 2.0 * (time - VANE.delay) / drive.stop, atol=1e-10)


def test_a_wrong_time_base_on_one_clock_is_another_natural_frequency(short_steps: InputStream) -> None:
    """Seconds 2 % too long for both logs: the logs show a rig 2 % faster, its delay 2 % shorter."""
    sensor = SimulatedSensor(sample_rate=60.0, exposure=0.004, common_clock=True)
    slow = SimulatedRig(model=VANE, sensor=sensor, faults=PlantedFaults(time_base_ppm=2e4))
    quick = SimulatedRig(model=replace(VANE, natural_frequency=3.06, delay=0.02 / 1.02), sensor=sensor)
    runs = [rig.run(short_steps, kind="step", name="s", rng=np.random.default_rng(1)) for rig in (slow, quick)]
    n = min(len(run.angle.angle) for run in runs)
    np.testing.assert_allclose(runs[0].angle.angle[:n], runs[1].angle.angle[:n], atol=1e-9)


def test_on_two_clocks_a_wrong_time_base_shows_in_their_ratio(short_steps: InputStream) -> None:
    """The sensor's clock is right: its frames are those of the voltage played 2 % more slowly."""
    sensor = SimulatedSensor(sample_rate=60.0, exposure=0.0, clock_offset=0.1)
    slow = SimulatedRig(model=VANE, sensor=sensor, faults=PlantedFaults(time_base_ppm=2e4))
    run = slow.run(short_steps, kind="step", name="s", rng=np.random.default_rng(1))
    played = replace(short_steps, time=short_steps.time * 1.02)
    healthy = SimulatedRig(model=VANE, sensor=sensor)
    expected = healthy.angle(played, 0.1 + run.angle.time, exposure=0.0)
    np.testing.assert_allclose(run.angle.angle, expected, atol=1e-9)
    np.testing.assert_array_equal(run.input.time, short_steps.time)


def test_silent_losses_close_up_the_stamps(short_steps: InputStream) -> None:
    """Three frames fewer, no gap: every stamp still follows the last by one interval."""
    sensor = SimulatedSensor(sample_rate=60.0, exposure=0.0)
    rig = SimulatedRig(model=VANE, sensor=sensor, faults=PlantedFaults(silent_losses=3))
    whole = SimulatedRig(model=VANE, sensor=sensor)
    lossy, full = (r.run(short_steps, kind="step", name="s", rng=np.random.default_rng(2)) for r in (rig, whole))
    assert len(lossy.angle.time) == len(full.angle.time) - 3
    np.testing.assert_allclose(np.diff(lossy.angle.time), 1 / 60, atol=1e-9)
    assert np.isin(lossy.angle.angle, full.angle.angle).all()


def test_faults_can_be_planted_in_one_test_only(short_steps: InputStream) -> None:
    """In the step test alone: the frequency test is that of a healthy rig."""
    sensor = SimulatedSensor(sample_rate=60.0, exposure=0.0)
    rig = SimulatedRig(model=VANE, sensor=sensor, faults=PlantedFaults(angle_scale=1.1), faults_in="step")
    step = rig.run(short_steps, kind="step", name="n", rng=np.random.default_rng(3))
    response = rig.run(short_steps, kind="response", name="n", rng=np.random.default_rng(3))
    np.testing.assert_allclose(step.angle.angle, 1.1 * response.angle.angle, atol=1e-12)


def test_every_fault_has_its_key_in_the_sheet() -> None:
    """A sheet with a fault plants that fault; the stops' angle is where the spring's change is stated."""
    sheet = rig_sheet_text() + "dry_friction = 0.2\nend_stop = 25.0\nspring_hardening = -0.1\nfaults_in = \"step\"\n"
    sheet = sheet.replace('faults_in = "both"', "# ")
    rig = SimulatedRig.from_sheet(parse_rig(sheet))
    assert rig.faults_in == "step"
    assert rig.faults == PlantedFaults(dry_friction=0.2, end_stop=25.0, spring_hardening=-0.1, spring_angle=30.0)
    assert SimulatedRig.from_sheet(parse_rig(rig_sheet_text())).faults == PlantedFaults(spring_angle=30.0)


def test_a_spring_that_cannot_hold_the_rig_is_refused() -> None:
    """Softened by 90 % at 10 deg and pushed to 24: one clear sentence, no overflow."""
    with pytest.raises(CaptureError, match="runs away"):
        faulty(step_drive(2.0, 4.0), np.array([3.0]), spring_hardening=-0.9, spring_angle=10.0)
