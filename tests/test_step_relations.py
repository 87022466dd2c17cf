"""The relations against brute force on a sampled step, closed forms, limits and round trips."""

from __future__ import annotations

import numpy as np
import pytest

from freqid.errors import EstimationError
from freqid.resonance_relations import (
    bandwidth_ratio,
    half_power_width_ratio,
    lower_half_power_ratio,
    quality_factor,
    resonance_frequency_ratio,
    resonance_gain_ratio,
    upper_half_power_ratio,
)
from freqid.second_order import SecondOrder
from freqid.step_relations import (
    damping_from_decrement,
    damping_from_half_cycle_peaks,
    damping_from_overshoot,
    logarithmic_decrement,
    normalised_crossing_time,
    normalised_delay_time_50,
    normalised_peak_time,
    normalised_rise_time_0_90,
    normalised_rise_time_10_90,
    normalised_settling_time,
    normalised_step_response,
    normalised_time_constant,
    percent_overshoot,
)

DAMPING = np.array([0.02, 0.1, 0.3, 0.5, 0.68, 0.7, 0.75, 0.79, 0.9, 0.999, 1.0, 1.001, 1.5, 4.0])
SPACING = 1e-3
TIME = SPACING * np.arange(int(220 / SPACING))


def simulated_step(damping_ratio: float) -> np.ndarray:
    """The step response at `TIME` from the exact state transition over one sample, multiplied out."""
    from scipy.linalg import expm

    n_block = 400
    transition = expm(SPACING * np.array([[0.0, 1.0], [-1.0, -2 * damping_ratio]]))
    within = np.array([np.linalg.matrix_power(transition, k)[0] for k in range(n_block)])
    over_block = np.linalg.matrix_power(transition, n_block)
    state, rows = np.array([-1.0, 0.0]), []
    for _ in range(0, TIME.size, n_block):
        rows.append(within @ state)
        state = over_block @ state
    return 1 + np.concatenate(rows)[: TIME.size]


@pytest.fixture(scope="module", params=DAMPING, ids=lambda ratio: f"zeta={ratio:g}")
def step(request: pytest.FixtureRequest) -> tuple[float, np.ndarray]:
    """A damping ratio and its sampled step response."""
    return float(request.param), simulated_step(float(request.param))


def first_at_or_above(response: np.ndarray, level: float) -> float:
    """The time of the first sample at or above a level."""
    return float(TIME[np.argmax(response >= level)])


def test_step_response_is_the_solution_of_the_equation_of_motion(step: tuple[float, np.ndarray]) -> None:
    """The closed form equals the state transition; 10⁻¹⁰ is 2·10⁵ matrix products' rounding with room."""
    damping_ratio, response = step
    np.testing.assert_allclose(normalised_step_response(TIME, damping_ratio), response, atol=1e-10)


def test_crossing_times_are_those_of_the_sampled_step(step: tuple[float, np.ndarray]) -> None:
    """Delay and rise times lie at most one sample before the first sample above the level."""
    damping_ratio, response = step
    late = {level: first_at_or_above(response, level) for level in (0.1, 0.5, 0.9)}
    for level, seen in late.items():
        assert 0 <= seen - normalised_crossing_time(damping_ratio, level) <= SPACING
    assert abs(late[0.5] - normalised_delay_time_50(damping_ratio)) <= SPACING
    assert abs(late[0.9] - normalised_rise_time_0_90(damping_ratio)) <= SPACING
    assert abs(late[0.9] - late[0.1] - normalised_rise_time_10_90(damping_ratio)) <= SPACING


@pytest.mark.parametrize("band", [0.05, 0.02])
def test_settling_time_is_the_last_exit_of_the_sampled_step(step: tuple[float, np.ndarray], band: float) -> None:
    """The last sample outside the band lies at most one sample before the settling time."""
    damping_ratio, response = step
    last_outside = TIME[np.flatnonzero(np.abs(response - 1) > band)[-1]]
    assert last_outside < TIME[-1] - 5, "the record must be longer than the settling time"
    assert 0 <= normalised_settling_time(damping_ratio, band) - last_outside <= SPACING


def test_peak_is_that_of_the_sampled_step(step: tuple[float, np.ndarray]) -> None:
    """The largest sample lies within half a sample of the peak time and at most curvature·spacing²/8 below it."""
    damping_ratio, response = step
    if damping_ratio >= 0.999:  # the overshoot is below 10⁻²⁸: nothing a sampled response can show
        assert percent_overshoot(damping_ratio) < 1e-20
        return
    peak = int(np.argmax(response))
    # near the peak the response is flat: rounding of 10⁻¹² hides the place to √(2·10⁻¹²/curvature), curvature = OS
    overshoot = float(percent_overshoot(damping_ratio)) / 100
    assert abs(TIME[peak] - normalised_peak_time(damping_ratio)) <= SPACING / 2 + np.sqrt(2e-12 / overshoot)
    assert abs(response[peak] - 1 - overshoot) <= SPACING**2 / 8 + 1e-12


def test_arrays_give_what_scalars_give() -> None:
    """Every relation of the damping ratio is elementwise."""
    relations = (
        percent_overshoot, normalised_peak_time, normalised_delay_time_50, normalised_rise_time_0_90,
        normalised_rise_time_10_90, normalised_time_constant, logarithmic_decrement, resonance_frequency_ratio,
        resonance_gain_ratio, bandwidth_ratio, quality_factor, half_power_width_ratio,
        lambda ratio: normalised_settling_time(ratio, 0.02),
    )  # fmt: skip
    for relation in relations:
        together = relation(DAMPING.reshape(2, 7))
        assert together.shape == (2, 7)
        one_by_one = [float(relation(ratio)) for ratio in DAMPING]
        np.testing.assert_allclose(together.ravel(), one_by_one, rtol=1e-14)


def test_light_damping_approaches_the_undamped_rig() -> None:
    """For ζ → 0 the response is 1 − cos x, the corrections are of order ζ, and the envelope sets the settling time."""
    tiny = 1e-6
    assert abs(percent_overshoot(tiny) / 100 - 1) < 4 * tiny  # 1 − πζ
    assert abs(normalised_peak_time(tiny) - np.pi) < tiny
    for level in (0.1, 0.5, 0.9):
        # d x/dζ is at most level/slope of the same order as 1: x = arccos(1 − level) + O(ζ)
        assert abs(normalised_crossing_time(tiny, level) - np.arccos(1 - level)) < 2 * tiny
    # the exit lies within half a cycle of where the envelope e^(−ζx) passes the band
    assert abs(normalised_settling_time(tiny, 0.02) + np.log(0.02) / tiny) < np.pi
    assert abs(half_power_width_ratio(tiny) / (2 * tiny) - 1) < tiny
    assert abs(logarithmic_decrement(tiny) / (2 * np.pi * tiny) - 1) < tiny


def test_heavy_damping_approaches_a_first_order_lag() -> None:
    """For ζ → ∞ the slow pole 1/(2ζ) remains: rise time ln 9, delay ln 2, settling ln 50 times 2ζ, within 1/(2ζ²)."""
    damping_ratio = 1e3
    slow = 2 * damping_ratio
    for seen, expected in (
        (normalised_rise_time_10_90(damping_ratio), np.log(9)),
        (normalised_delay_time_50(damping_ratio), np.log(2)),
        (normalised_settling_time(damping_ratio, 0.02), np.log(50)),
    ):
        assert abs(float(seen) / slow / expected - 1) < 1 / damping_ratio**2
    assert abs(float(bandwidth_ratio(damping_ratio)) * slow - 1) < 1 / damping_ratio**2


@pytest.mark.parametrize("gap", [1e-6, 1e-9, 1e-13])
def test_critical_damping_is_met_from_both_sides(gap: float) -> None:
    """No time jumps at ζ = 1: slopes there are below 15, and 10⁻¹³ is rounding, so the change is below 30 gaps."""
    sides = np.array([1 - gap, 1.0, 1 + gap])
    for relation in (
        normalised_delay_time_50,
        normalised_rise_time_0_90,
        normalised_rise_time_10_90,
        lambda ratio: normalised_settling_time(ratio, 0.02),
        bandwidth_ratio,
    ):
        assert np.ptp(relation(sides)) < 30 * gap + 1e-13
    # at ζ = 1 exactly: (1 + x)·e^(−x) = 1 − level
    x = float(normalised_crossing_time(1.0, 0.9))
    assert abs((1 + x) * np.exp(-x) - 0.1) < 1e-15


def test_settling_time_jumps_where_the_overshoot_equals_the_band() -> None:
    """Just below that damping ratio the response leaves the band once more; the higher side is at the peak's height."""
    for band in (0.05, 0.02):
        edge = float(damping_from_overshoot(100 * band))
        below, above = normalised_settling_time(np.array([edge - 1e-9, edge + 1e-9]), band)
        # the longer one ends at the peak, where the response is flat: off it by √(2·δOS/OS'') ~ 10⁻⁴
        assert abs(below - normalised_peak_time(edge)) < 1e-3
        assert abs(normalised_step_response(above, edge) - (1 - band)) < 1e-8


def test_nothing_is_given_where_nothing_exists() -> None:
    """Peak time and decrement end at ζ = 1, the resonance at 1/√2, the lower half-power frequency at sin(π/8)."""
    assert np.isnan(normalised_peak_time([1.0, 2.0])).all()
    assert np.isnan(logarithmic_decrement([1.0, 2.0])).all()
    assert np.array_equal(percent_overshoot([1.0, 2.0]), [0.0, 0.0])
    assert np.isnan(resonance_frequency_ratio([np.sqrt(0.5), 1.0])).all()
    assert np.isnan(resonance_gain_ratio([np.sqrt(0.5), 1.0])).all()
    edge = np.sin(np.pi / 8)
    assert np.isfinite(lower_half_power_ratio(edge - 1e-6)) and np.isnan(lower_half_power_ratio(edge + 1e-6))
    assert np.isnan(half_power_width_ratio(edge + 1e-6)) and np.isfinite(upper_half_power_ratio(edge + 1e-6))


@pytest.mark.parametrize("damping_ratio", [0.01, 0.12, 0.3, 0.38])
def test_resonance_is_that_of_the_frequency_response(damping_ratio: float) -> None:
    """Maximum and half-power points lie where the model's own response has them; 10⁻¹² is rounding."""

    def power(ratio: object) -> float:
        return float(abs(SecondOrder(gain=1, natural_frequency=1, damping_ratio=damping_ratio).response(ratio)) ** 2)

    peak = float(resonance_gain_ratio(damping_ratio)) ** 2
    frequency = float(resonance_frequency_ratio(damping_ratio))
    assert abs(power(frequency) / peak - 1) < 1e-12
    assert power(frequency * (1 + 1e-3)) < peak > power(frequency * (1 - 1e-3))
    lower, upper = float(lower_half_power_ratio(damping_ratio)), float(upper_half_power_ratio(damping_ratio))
    assert lower < frequency < upper
    for ratio in (lower, upper):
        assert abs(2 * power(ratio) / peak - 1) < 1e-11  # |H|² changes by about 1/ζ times the relative change of u
    assert abs(upper - lower - half_power_width_ratio(damping_ratio)) < 1e-14
    assert abs(2 * power(bandwidth_ratio(damping_ratio)) - 1) < 1e-12
    assert abs(power(1.0) - quality_factor(damping_ratio) ** 2) < 1e-11 * power(1.0)


def test_damping_is_recovered_from_what_it_causes() -> None:
    """Overshoot, decrement and half-cycle peaks each give the damping ratio back; overshoot loses digits near ζ = 1."""
    damping_ratio = np.linspace(0.01, 0.95, 95)
    overshoot = percent_overshoot(damping_ratio)
    np.testing.assert_allclose(damping_from_overshoot(overshoot), damping_ratio, rtol=1e-12)
    np.testing.assert_allclose(damping_from_decrement(logarithmic_decrement(damping_ratio)), damping_ratio, rtol=1e-14)
    first = overshoot / 100
    np.testing.assert_allclose(damping_from_half_cycle_peaks(first, first**2), damping_ratio, rtol=1e-12)


def test_damping_from_what_cannot_be() -> None:
    """No overshoot, more than 100 % and missing peaks give NaN; a growing motion has negative damping."""
    assert np.isnan(damping_from_overshoot([0.0, -1.0, 100.1, np.nan])).all()
    assert damping_from_overshoot(100.0) == 0
    assert np.isnan(damping_from_half_cycle_peaks([0.0, 1.0], [1.0, -1.0])).all()
    assert damping_from_half_cycle_peaks(1.0, 2.0) == -damping_from_half_cycle_peaks(2.0, 1.0) < 0


@pytest.mark.parametrize("damping_ratio", [0.0, -0.1, np.nan, np.inf, [0.1, -0.25]])
def test_a_damping_ratio_that_is_not_positive_is_refused(damping_ratio: object) -> None:
    """The message names the quantity, the value and the limit."""
    with pytest.raises(EstimationError, match=r"damping_ratio = \S+: must be a finite number above 0"):
        percent_overshoot(damping_ratio)


def test_the_final_value_is_reached_only_below_critical_damping() -> None:
    """The rise time to 100 % is (π − arccos ζ)/√(1−ζ²) below ζ = 1 (10⁻¹³: rounding) and does not exist from there."""
    damping_ratio = np.array([0.01, 0.3, 0.9])
    expected = (np.pi - np.arccos(damping_ratio)) / np.sqrt(1 - damping_ratio**2)
    np.testing.assert_allclose(normalised_crossing_time(damping_ratio, 1.0), expected, rtol=1e-13)
    assert np.isnan(normalised_crossing_time([1.0, 2.0], 1.0)).all()


def test_levels_and_bands_outside_their_range_are_refused() -> None:
    """Levels and bands are fractions of the final value."""
    with pytest.raises(EstimationError, match=r"level = 1\.5: give a fraction"):
        normalised_crossing_time(0.5, [0.5, 1.5])
    for band in (0, 1, 5):
        with pytest.raises(EstimationError, match=f"band = {band}: give a fraction"):
            normalised_settling_time(0.5, band)
    assert normalised_crossing_time(0.5, 0) == 0
