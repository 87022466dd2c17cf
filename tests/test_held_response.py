"""The exact response is what everything rests on: held against brute force, closed forms and limits."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.linalg import expm

from freqid.held_response import Drive, HeldResponse, free_decay, free_decay_slopes

RIGS = [(3.0, 0.12), (3.0, 0.005), (1.7, 1.0), (1.64, 2.39), (0.7, 0.9999999), (40.0, 0.3)]


def _drive(smooth: bool, n: int = 400, interval: float = 0.01) -> Drive:
    voltage = np.concatenate([[0.3], 0.3 + np.random.default_rng(1).normal(size=n - 1)])
    return Drive.from_samples(voltage, start=0.5, interval=interval, smooth=smooth)


@pytest.mark.parametrize(("frequency", "damping"), RIGS)
@pytest.mark.parametrize("smooth", [False, True])
def test_states_equal_the_augmented_matrix_exponential(frequency: float, damping: float, smooth: bool) -> None:
    """Step by step with scipy's expm of the system augmented by its input: an independent exact solution."""
    drive = _drive(smooth)
    wn = 2 * np.pi * frequency
    a = np.zeros((4, 4))
    a[0, 1], a[1], a[2, 3] = 1, [-(wn**2), -2 * damping * wn, wn**2, 0], 1
    step = expm(a * drive.interval)
    x, angles = np.zeros(2), [0.0]
    for value, slope in zip(drive.value[:-1], drive.slope[:-1], strict=True):
        x = (step @ [*x, value, slope])[:2]
        angles.append(x[0])
    time = drive.start + np.arange(len(drive.value)) * drive.interval
    got = HeldResponse(drive, frequency, damping).at(time)
    # rounding: 1e-16 / (wn dt)^2 with wn dt >= 0.044, times 400 steps, and some head-room
    np.testing.assert_allclose(got, angles, atol=1e-10)


@pytest.mark.parametrize(("frequency", "damping"), RIGS)
def test_between_samples_equals_an_adaptive_solver(frequency: float, damping: float) -> None:
    """Angle and exposure mean at odd instants against scipy's adaptive integrator run piece by piece."""
    drive = _drive(False, n=12, interval=0.05)
    wn = 2 * np.pi * frequency
    state, end, mean = np.zeros(3), [], []
    for m, value in enumerate(drive.value):
        t0 = drive.start + m * drive.interval
        piece = solve_ivp(
            lambda t, y, v=value: [y[1], wn**2 * (v - y[0]) - 2 * damping * wn * y[1], y[0]],
            (0, drive.interval), state, method="DOP853", rtol=1e-11, atol=1e-13, dense_output=True,
        )
        for t in (0.011, 0.037):
            end.append(t0 + t)
            mean.append((piece.sol(t)[2] - piece.sol(t - 0.01)[2]) / 0.01)
        state = piece.y[:, -1]
    got = HeldResponse(drive, frequency, damping).mean(np.array(end), 0.01)
    np.testing.assert_allclose(got, mean, atol=2e-9)  # solver's tolerance 1e-11 divided by the exposure


def test_exposure_mean_tends_to_the_angle() -> None:
    """The mean over a vanishing exposure is the angle itself: the difference is half the exposure times the rate."""
    response = HeldResponse(_drive(False), 3.0, 0.12)
    time = np.linspace(0.6, 4.0, 50)
    mean, _ = response.mean_and_rate(time, 1e-4)
    np.testing.assert_allclose(mean, response.at(time) - 0.5e-4 * response.rate_at(time), atol=1e-5)


def test_rate_is_the_derivative_of_the_mean() -> None:
    """The rate handed to the clock and delay derivatives equals a central difference."""
    response = HeldResponse(_drive(True), 3.0, 0.12)
    time = np.linspace(0.6, 4.0, 50)
    h = 1e-6
    difference = (response.mean(time + h, 0.008) - response.mean(time - h, 0.008)) / (2 * h)
    np.testing.assert_allclose(response.mean_and_rate(time, 0.008)[1], difference, atol=1e-6)


@pytest.mark.parametrize(("frequency", "damping"), RIGS)
def test_free_decay_solves_the_equation(frequency: float, damping: float) -> None:
    """Columns start at (1, 0) and (0, wn) and equal the matrix exponential."""
    wn = 2 * np.pi * frequency
    time = np.array([0.0, 0.01, 0.1, 0.7])
    a = np.array([[0, 1], [-(wn**2), -2 * damping * wn]])
    expected = [[expm(a * t)[0, 0], expm(a * t)[0, 1] * wn] for t in time]
    np.testing.assert_allclose(free_decay(wn, damping, time), expected, atol=1e-9)


def test_rest_before_and_after() -> None:
    """Before the first sample the rig rests; long after the last it stands at the last voltage."""
    drive = Drive.from_samples(np.array([1.0, 1.0, 3.0]), start=2.0, interval=0.1, smooth=False)
    response = HeldResponse(drive, 3.0, 0.5)
    np.testing.assert_array_equal(response.at(np.array([-5.0, 0.0, 1.99])), 0.0)
    np.testing.assert_allclose(response.at(np.array([20.0])), 2.0, atol=1e-12)


@pytest.mark.parametrize("exposure", [0.0, 0.008])
@pytest.mark.parametrize("smooth", [False, True])
@pytest.mark.parametrize(("frequency", "damping"), RIGS)
def test_slopes_equal_differences_of_the_motion(
    frequency: float, damping: float, smooth: bool, exposure: float
) -> None:
    """Derivatives by natural frequency and damping ratio against Richardson's extrapolated central differences.

    Steps of h and h / 2 with h = 1e-3 of the value leave (1e-3 Q)^4 / 5, Q at most 100 and the record (4 s) shorter
    than its decay: 2e-5. Above zeta = 1 the step in zeta changes the slow pole as much as in proportion: less.
    """
    drive = _drive(smooth)
    time = np.linspace(0.4, 6.0, 300)
    got = HeldResponse(drive, frequency, damping).mean_motion(time, exposure)
    # the same sums in another order: 1e-16 / (wn^2 dt exposure) with wn >= 4.4/s
    np.testing.assert_allclose(got.angle, HeldResponse(drive, frequency, damping).mean(time, exposure), atol=1e-12)

    def extrapolated(by_frequency: bool) -> np.ndarray:
        def central(share: float) -> np.ndarray:
            ends = []
            for sign in (1, -1):
                factor = 1 + sign * share
                rig = (frequency * factor, damping) if by_frequency else (frequency, damping * factor)
                ends.append(HeldResponse(drive, *rig).mean(time, exposure))
            return (ends[0] - ends[1]) / (2 * share * (frequency if by_frequency else damping))

        return (4 * central(5e-4) - central(1e-3)) / 3

    for derivative, by_frequency in ((got.by_natural_frequency, True), (got.by_damping_ratio, False)):
        expected = extrapolated(by_frequency)
        np.testing.assert_allclose(derivative, expected, atol=2e-5 * np.max(np.abs(expected)))


@pytest.mark.parametrize(("frequency", "damping"), RIGS)
def test_slopes_of_the_free_decay_equal_its_differences(frequency: float, damping: float) -> None:
    """From an angle of 2 and a rate of -0.7 wn: central differences with 1e-5 of the value, error (1e-5 Q)^2 < 1e-6."""
    time = np.linspace(-0.2, 3.0, 200)
    wn, start = 2 * np.pi * frequency, np.array([2.0, -0.7])
    got = free_decay_slopes(wn, damping, time, (2.0, -0.7))
    h = 1e-5
    motions = [free_decay(wn * (1 + s * h), damping, time) @ start for s in (1, -1)]
    expected = (motions[0] - motions[1]) / (2 * h * frequency)
    np.testing.assert_allclose(got[:, 0], expected, atol=2e-6 * np.max(np.abs(expected)))
    motions = [free_decay(wn, damping * (1 + s * h), time) @ start for s in (1, -1)]
    expected = (motions[0] - motions[1]) / (2 * h * damping)
    np.testing.assert_allclose(got[:, 1], expected, atol=2e-6 * np.max(np.abs(expected)))
    assert np.all(got[time < 0] == 0)


def test_finely_sampled_voltage_loses_nothing() -> None:
    """A step sampled at 100 kHz is the closed-form step response at any instant, and so are its slopes' ends.

    wn dt is 1.9e-4: rounding of about 1e-16 / (wn dt)^2 = 3e-9.
    """
    voltage = np.ones(200_000)
    voltage[0] = 0.0
    drive = Drive.from_samples(voltage, start=0.0, interval=1e-5, smooth=False)
    time = np.linspace(0.0, 1.9, 500)
    wn, zeta = 2 * np.pi * 3.0, 0.12
    wd = wn * np.sqrt(1 - zeta**2)
    t = np.maximum(time - 1e-5, 0)
    expected = 1 - np.exp(-zeta * wn * t) * (np.cos(wd * t) + zeta * wn / wd * np.sin(wd * t))
    np.testing.assert_allclose(HeldResponse(drive, 3.0, zeta).at(time), expected, atol=1e-8)


@pytest.mark.parametrize(("points", "bound"), [(8, 5e-4), (16, 3e-5)])
def test_few_points_per_period_carry_a_smooth_signal(points: int, bound: float) -> None:
    """Straight lines between moved points answer a sine as the sine itself does, from a few points per period on.

    The correction misses by 128/1575 sin^8(pi / points): 4e-5 and 1.7e-7. The lines' first image, at points - 1 times
    the frequency, is 1 / (points - 1)^2 of it, and the rig lets through another 1 / (points - 1)^2: 4e-4 and 2e-5.
    Lines through the points themselves would lose (pi / points)^2 / 3: 5 % and 1.3 %.
    """
    interval = 1 / (3.0 * points)
    time = interval * np.arange(round(40 / interval))
    drive = Drive.through_smooth_samples(np.sin(2 * np.pi * 3 * time), start=0.0, interval=interval, refine=1)
    asked = np.linspace(30, 38, 500)
    rig = 1 / (1 - (3 / 2.5) ** 2 + 2j * 0.3 * 3 / 2.5)
    expected = (rig * np.exp(2j * np.pi * 3 * asked)).imag
    got = HeldResponse(drive, 2.5, 0.3).at(asked)
    assert np.max(np.abs(got - expected)) < bound * abs(rig)
