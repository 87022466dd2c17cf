"""The model in the frequency domain against closed forms, its own polynomials, numerical derivatives and limits."""

from __future__ import annotations

import math

import numpy as np
import pytest

from freqid.second_order import PARAMETER_ORDER, SecondOrder, parameter_units

DAMPING = [0.02, 0.12, 0.5, 1.0, 2.4]


def rig(damping: float, *, delay: float = 0.02, gain: float = 12.0) -> SecondOrder:
    """3 Hz with the damping ratio asked for."""
    return SecondOrder(gain=gain, natural_frequency=3.0, damping_ratio=damping, delay=delay)


@pytest.mark.parametrize("damping", DAMPING)
def test_at_the_natural_frequency_gain_and_phase_are_closed_forms(damping: float) -> None:
    """K / (2 zeta), and a lag of 90 degrees plus that of the delay; rounding only."""
    (value,) = rig(damping).response([3.0])
    assert abs(value) == pytest.approx(12.0 / (2 * damping), rel=1e-12)
    assert math.degrees(math.atan2(value.imag, value.real)) == pytest.approx(-90 - 360 * 3.0 * 0.02, abs=1e-9)


@pytest.mark.parametrize("damping", DAMPING)
def test_response_is_the_ratio_of_its_polynomials_times_the_delay(damping: float) -> None:
    """`coefficients` in powers of s = j 2 pi f give the same complex numbers."""
    model, f = rig(damping), np.geomspace(0.01, 300, 60)
    numerator, denominator = model.coefficients()
    s = 2j * np.pi * f
    expected = np.polyval(numerator, s) / np.polyval(denominator, s) * np.exp(-s * model.delay)
    np.testing.assert_allclose(model.response(f), expected, rtol=1e-11)


@pytest.mark.parametrize("damping", DAMPING)
def test_sensitivity_equals_numerical_differences(damping: float) -> None:
    """Central differences, relative step 1e-5: truncation (1e-5 Q)^2, Q at most 25, is below 1e-7; rounding 1e-11 /
    1e-5.
    """
    model, f = rig(damping), np.linspace(0.2, 9.0, 40)
    for number in range(len(PARAMETER_ORDER)):
        step = np.zeros(4)
        step[number] = 1e-5 * model.vector[number]
        high, low = (SecondOrder.from_vector(model.vector + sign * step).response(f) for sign in (1, -1))
        expected = (high - low) / (2 * step[number])
        scale = np.max(np.abs(expected))
        np.testing.assert_allclose(model.sensitivity(f)[:, number], expected, atol=2e-6 * scale)


@pytest.mark.parametrize("damping", DAMPING)
def test_poles_are_the_roots_of_the_denominator(damping: float) -> None:
    """numpy's root finder agrees; a double root (zeta 1) is determined to the square root of the rounding only."""
    model = rig(damping)
    expected = sorted(np.roots(model.coefficients()[1]), key=lambda p: (p.real, p.imag))
    found = sorted(model.poles, key=lambda p: (p.real, p.imag))
    np.testing.assert_allclose(found, expected, rtol=1e-6 if damping == 1.0 else 1e-10)
    assert model.slowest_decay == pytest.approx(-1 / max(p.real for p in expected), rel=1e-6)


def test_a_very_overdamped_rig_decays_as_its_slow_pole() -> None:
    """For zeta far above 1 the slow time constant tends to 2 zeta / wn, short of it by 1 / (4 zeta^2) and smaller
    terms.
    """
    assert rig(50.0).slowest_decay == pytest.approx(2 * 50 / (2 * np.pi * 3.0), rel=1 / (3 * 50**2))


def test_limits_in_frequency() -> None:
    """At rest the response is the gain itself; far above resonance it falls as (fn / f)^2 with a lag of 180 degrees."""
    model = rig(0.12, delay=0.0)
    assert model.response([0.0])[0] == 12.0
    (far,) = model.response([3000.0])
    # relative to -K (fn/f)^2 what is left out is 2 zeta fn / f = 2.4e-4
    assert far == pytest.approx(-12.0e-6, rel=3e-4)


def test_a_reversed_sensor_turns_every_value_round() -> None:
    """K < 0 is the same response times -1."""
    f = np.linspace(0.1, 10, 20)
    np.testing.assert_array_equal(rig(0.3, gain=-12.0).response(f), -rig(0.3).response(f))


def test_negative_frequencies_are_conjugate() -> None:
    """The impulse response is real."""
    f = np.linspace(0.1, 10, 20)
    np.testing.assert_allclose(rig(0.3).response(-f), np.conj(rig(0.3).response(f)), rtol=1e-14)


def test_vector_keeps_the_order_of_the_parameters() -> None:
    """There and back, in `PARAMETER_ORDER`, with the units scripts read."""
    model = rig(0.12)
    assert list(model.vector) == [getattr(model, name) for name in PARAMETER_ORDER]
    assert SecondOrder.from_vector(model.vector) == model
    assert parameter_units("rad") == {"gain": "rad/V", "natural_frequency": "Hz", "damping_ratio": "1", "delay": "s"}


@pytest.mark.parametrize(("frequency", "damping"), [(0.0, 0.1), (-3.0, 0.1), (3.0, 0.0), (3.0, -0.1), (math.nan, 0.1)])
def test_impossible_parameters_are_refused(frequency: float, damping: float) -> None:
    """One line that names both values."""
    with pytest.raises(ValueError, match=r"must be positive, not .*natural_frequency=.* Hz.*damping_ratio=") as told:
        SecondOrder(gain=1.0, natural_frequency=frequency, damping_ratio=damping)
    assert "\n" not in str(told.value)
