"""The model at a controller's rate against a simulation of the held voltage, closed forms and its limits."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import cont2discrete, lfilter

from freqid.discrete_model import held_equivalent
from freqid.held_response import Drive, HeldResponse
from freqid.second_order import SecondOrder

RIGS = [
    SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=delay) for delay in (0.0, 0.02, 0.0234)
] + [
    SecondOrder(gain=-2.0, natural_frequency=3.0, damping_ratio=1.0, delay=0.011),
    SecondOrder(gain=1.0, natural_frequency=8.0, damping_ratio=2.5, delay=0.1),
]


@pytest.mark.parametrize("rig", RIGS)
@pytest.mark.parametrize("rate", [20.0, 100.0, 1000.0])
def test_difference_equation_gives_the_exact_angle_at_the_samples(rig: SecondOrder, rate: float) -> None:
    """Any held voltage gives, sample by sample, what the exact response in time gives at those instants."""
    rng = np.random.default_rng(3)
    voltage = np.concatenate([np.zeros(5), rng.standard_normal(300)])
    found = held_equivalent(rig, sample_rate=rate)
    delayed = np.concatenate([np.zeros(found.delay_samples), voltage])[: len(voltage)]
    angle = lfilter(found.numerator, found.denominator, delayed)
    drive = Drive.from_samples(voltage, start=0.0, interval=1 / rate, smooth=False)
    held = HeldResponse(drive, natural_frequency=rig.natural_frequency, damping_ratio=rig.damping_ratio)
    exact = rig.gain * held.at(np.arange(len(voltage)) / rate - rig.delay)
    # rounding: the recursion forgets nothing in 300 steps (pole at 1 - wn zeta T), 1e-16 * 300 * condition below 1e-9
    np.testing.assert_allclose(angle, exact, atol=1e-9 * np.abs(exact).max())


def test_without_delay_it_is_the_usual_discretisation() -> None:
    """With no delay the coefficients are those of an independent zero-order-hold conversion."""
    rig = RIGS[0]
    found = held_equivalent(rig, sample_rate=50.0)
    numerator, denominator, _ = cont2discrete(rig.coefficients(), 1 / 50.0, method="zoh")
    np.testing.assert_allclose(found.numerator[:3], numerator[0], rtol=1e-10, atol=1e-12)
    np.testing.assert_allclose(found.denominator, denominator, rtol=1e-10)
    assert found.numerator[0] == 0 and found.numerator[3] == 0 and found.delay_samples == 0


def test_whole_delay_is_whole_samples() -> None:
    """20 ms at 100 Hz is two samples, with no fraction left by rounding; 1/3 s at 30 Hz is ten."""
    two = held_equivalent(RIGS[1], sample_rate=100.0)
    assert two.delay_samples == 2 and two.numerator[3] == 0
    ten = held_equivalent(SecondOrder(gain=1, natural_frequency=1, damping_ratio=0.5, delay=1 / 3), sample_rate=30.0)
    assert ten.delay_samples == 10 and ten.numerator[3] == 0


@pytest.mark.parametrize("rig", RIGS)
def test_static_gain_is_kept(rig: SecondOrder) -> None:
    """At zero frequency the discrete model has the gain of the continuous one."""
    found = held_equivalent(rig, sample_rate=200.0)
    # the denominator's sum is (wn T)^2 at its smallest, 0.009 here: rounding 1e-16 / 0.009
    assert found.response(np.zeros(1))[0].real == pytest.approx(rig.gain, rel=1e-12)


def test_static_gain_is_kept_at_the_fastest_rate_allowed() -> None:
    """The limit of the rate leaves the coefficients good enough: rounding of 1e-16 over (2 pi / 1e5)^2 = 4e-9."""
    rig = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.0)
    found = held_equivalent(rig, sample_rate=3e5)
    # a few roundings of 1.1e-16 in each of the sums: 10 * 1.1e-16 / 4e-9 = 3e-7
    assert found.response(np.zeros(1))[0].real == pytest.approx(rig.gain, rel=3e-7)


def test_fast_controller_sees_the_continuous_rig() -> None:
    """Far below the rate the response is the continuous one times the hold (half an interval late)."""
    rig, rate = RIGS[2], 20000.0
    frequency = np.array([0.5, 3.0, 9.0])
    found = held_equivalent(rig, sample_rate=rate).response(frequency)
    hold = np.exp(-1j * np.pi * frequency / rate)
    # what is left is aliasing and the hold's droop: (pi f T)^2 / 6 = 3e-7 at 9 Hz, and terms of the same order
    np.testing.assert_allclose(found, rig.response(frequency) * hold, rtol=2e-6)


def test_a_delay_near_whole_samples_has_a_slope() -> None:
    """With the count of whole samples fixed, the response changes smoothly with the delay on both sides of them."""
    frequency = np.array([2.0])

    def at(delay: float) -> complex:
        rig = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=delay)
        return complex(held_equivalent(rig, sample_rate=100.0, delay_samples=2).response(frequency)[0])

    before, middle, after = (at(0.02 + step) for step in (-1e-4, 0.0, 1e-4))
    # the second difference is (2 pi f)^2 step^2 = 1.6e-6 of the response, the first 1.3e-3
    assert abs(after - 2 * middle + before) < 1e-5 * abs(middle) < 0.01 * abs(after - before)


@pytest.mark.parametrize(
    ("delay", "rate", "says"),
    [
        (-0.01, 100.0, "delay, -0.01 s, must be at least 0"),
        (61.0, 100.0, "delay, 61 s, must be at least 0 and at most 60 s"),
        (np.inf, 100.0, "delay, inf s"),
        (np.nan, 100.0, "delay, nan s"),
        (0.0, 0.0, "rate"),
        (0.0, np.inf, "rate"),
        (0.0, 0.9e-5, "rate, 9e-06 Hz, must be at least 1e-05 and at most 1e[+]05 Hz"),
        (0.0, 1.1e5, "rate, 110000 Hz, must be at least"),
    ],
)
def test_impossible_requests_are_refused(delay: float, rate: float, says: str) -> None:
    """A negative delay or a rate that is none is named."""
    rig = SecondOrder(gain=1.0, natural_frequency=1.0, damping_ratio=0.5, delay=delay)
    with pytest.raises(ValueError, match=says):
        held_equivalent(rig, sample_rate=rate)
