"""Why do the tests differ, and what to run next: each cause only where the data speak for it."""

from __future__ import annotations

from dataclasses import replace

import pytest
from two_tests import VANE, checked, frequency_test, moved, step_test

from freqid.crosscheck.comparison_result import CrossCheck
from freqid.quantity import Quantity
from freqid.step_test.step_result import STEP_QUANTITIES, StepReading


def causes(check: CrossCheck) -> list[str]:
    """The codes, strongest first."""
    return [c.cause for c in check.causes]


def test_a_scale_error_is_named() -> None:
    """The gain alone differs: voltage or angle is scaled otherwise."""
    check = checked(frequency_test(moved("gain", 0.1), (1e-3,) * 4), step_test(VANE, (1e-3,) * 4))
    assert "scale_error" in causes(check)
    assert "+10 %" in next(c for c in check.causes if c.cause == "scale_error").evidence


def test_a_wrong_time_scale_is_named() -> None:
    """The natural frequency differs at equal damping."""
    check = checked(frequency_test(moved("natural_frequency", 0.05), (1e-3,) * 4), step_test(VANE, (1e-3,) * 4))
    assert "time_scale" in causes(check)
    assert "scale_error" not in causes(check)


def test_everything_different_is_neither() -> None:
    """Where all three differ no single scale explains it."""
    vector = VANE * [1.3, 0.8, 1.5, 1]
    check = checked(frequency_test(vector, (1e-3,) * 4), step_test(VANE, (1e-3,) * 4))
    assert check.verdict == "disagree"
    assert causes(check) == []


def test_a_reversed_sensor_is_named() -> None:
    """Gains of the same size and opposite sign: nothing else needs to be tried."""
    check = checked(frequency_test(VANE * [-1, 1, 1, 1]), step_test())
    assert causes(check) == ["sensor_reversed"]
    assert "-12 deg/V in the frequency test and +12 in the step test" in check.causes[0].evidence


def test_an_inadequate_model_is_evidence() -> None:
    """Misfit twice the noise: strength 1 - 1/2."""
    check = checked(frequency_test(moved("gain", 0.1), p_value=1e-9), step_test())
    (cause,) = [c for c in check.causes if c.cause == "model_inadequate"]
    assert cause.strength == pytest.approx(0.5)


def test_unequal_steps_are_evidence() -> None:
    """Gains of 12 up and 11 down, three of each, known to 0.01: friction or an operating point that matters."""

    def one(up: bool, gain: float) -> StepReading:
        readings: dict[str, Quantity | None] = dict.fromkeys(STEP_QUANTITIES)
        readings["static_gain"] = Quantity.normal(gain, "deg/V", 0.01)
        low, high = (0.0, 1.0) if up else (1.0, 0.0)
        return StepReading(time=0.0, voltage_before=low, voltage_after=high, quantities=readings)

    steps = tuple(one(up, g) for up, g in [(True, 12.0), (False, 11.0), (True, 12.01), (False, 11.01)])
    check = checked(frequency_test(moved("gain", 0.1)), replace(step_test(), steps=steps))
    assert "unequal_directions" in causes(check)
    same = tuple(one(up, 12.0 + 0.01 * up) for up in (True, False, True, False))
    assert "unequal_directions" not in causes(
        checked(frequency_test(moved("gain", 0.1)), replace(step_test(), steps=same))
    )


def test_too_little_data_is_named_where_nothing_else_speaks() -> None:
    """Uncertainty beyond the tolerance, and no contradiction."""
    check = checked(frequency_test(relative=(1e-4, 1e-4, 0.01, 1e-4)), step_test(relative=(1e-4, 1e-4, 0.1, 1e-4)))
    assert check.verdict == "unresolved"
    assert causes(check) == ["too_little_data"]
