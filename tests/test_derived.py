"""Derived quantities against Monte Carlo, closed forms, limits and a table of what does not exist."""

from __future__ import annotations

import math

import numpy as np
import pytest

from freqid.derived import DERIVED_NAMES, derived_quantities, undefined_reasons
from freqid.errors import EstimationError
from freqid.quantity import coverage_factor
from freqid.step_relations import (
    damping_from_overshoot,
    normalised_delay_time_50,
    normalised_peak_time,
    normalised_settling_time,
    percent_overshoot,
)

VANE = np.array([12.0, 3.0, 0.12, 0.02])
UNCERTAINTIES = np.array([0.1, 0.01, 0.002, 0.0005])
CORRELATION = np.array([[1, 0.1, 0.6, 0.1], [0.1, 1, 0.2, 0.5], [0.6, 0.2, 1, 0.3], [0.1, 0.5, 0.3, 1]])
COVARIANCE = CORRELATION * np.outer(UNCERTAINTIES, UNCERTAINTIES)
FROM_STEP = ("peak_time", "delay_time_50", "settling_time_5", "settling_time_2")
SMOOTH = tuple(name for name in DERIVED_NAMES if not name.startswith("settling"))


def values(point: np.ndarray) -> dict[str, float]:
    """The derived values alone, for parameters known exactly."""
    seen = derived_quantities(point, np.zeros((4, 4)), angle_unit="deg")
    return {name: quantity.value for name, quantity in seen.items() if quantity is not None}


def test_names_units_and_order_are_those_of_the_model_file() -> None:
    """Scripts read these twelve names with these units."""
    units = {name: quantity.unit for name, quantity in derived_quantities(VANE, COVARIANCE, angle_unit="rad").items()}
    assert list(units.items()) == [
        ("resonance_frequency", "Hz"),
        ("resonance_gain", "rad/V"),
        ("bandwidth", "Hz"),
        ("quality_factor", "1"),
        ("percent_overshoot", "%"),
        ("peak_time", "s"),
        ("delay_time_50", "s"),
        ("rise_time_0_90", "s"),
        ("rise_time_10_90", "s"),
        ("settling_time_5", "s"),
        ("settling_time_2", "s"),
        ("time_constant", "s"),
    ]


def test_values_are_the_closed_forms() -> None:
    """Each value is the textbook expression; 10⁻¹² is rounding."""
    gain, frequency, damping, _ = VANE
    omega = 2 * math.pi * frequency
    root = math.sqrt(1 - damping**2)
    expected = {
        "resonance_frequency": frequency * math.sqrt(1 - 2 * damping**2),
        "resonance_gain": gain / (2 * damping * root),
        "quality_factor": 1 / (2 * damping),
        "percent_overshoot": 100 * math.exp(-math.pi * damping / root),
        "peak_time": math.pi / (omega * root),
        "time_constant": 1 / (damping * omega),
        "settling_time_2": float(normalised_settling_time(damping, 0.02)) / omega,
    }
    seen = values(VANE)
    assert {name: seen[name] for name in expected} == pytest.approx(expected, rel=1e-12)


def test_standard_uncertainties_are_those_of_a_monte_carlo() -> None:
    """Linear propagation with correlations gives the scatter of the values over 4000 draws.

    The scatter of n draws is known to 1/√(2n) = 1.1 %; four of these, and 1 % for the curvature at u(ζ)/ζ = 1.7 %
    (second order: (u/ζ)² ~ 0.03 %, for the resonance at most ten times that).
    """
    n_draws = 4000
    draws = np.random.default_rng(5).multivariate_normal(VANE, COVARIANCE, n_draws)
    rows = [values(point) for point in draws[:200]]
    quick = {
        "quality_factor": 1 / (2 * draws[:, 2]),
        "percent_overshoot": percent_overshoot(draws[:, 2]),
        "peak_time": normalised_peak_time(draws[:, 2]) / (2 * math.pi * draws[:, 1]),
        "delay_time_50": normalised_delay_time_50(draws[:, 2]) / (2 * math.pi * draws[:, 1]),
        "resonance_gain": draws[:, 0] / (2 * draws[:, 2] * np.sqrt(1 - draws[:, 2] ** 2)),
        "resonance_frequency": draws[:, 1] * np.sqrt(1 - 2 * draws[:, 2] ** 2),
        "time_constant": 1 / (draws[:, 2] * 2 * math.pi * draws[:, 1]),
    }
    seen = derived_quantities(VANE, COVARIANCE, angle_unit="deg")
    for name, drawn in quick.items():
        assert seen[name].standard_uncertainty == pytest.approx(np.std(drawn), rel=4 / math.sqrt(2 * n_draws) + 0.01)
    for name in SMOOTH:  # the product's own values, 200 draws: 4·5 % and 1 %
        drawn = [row[name] for row in rows]
        assert seen[name].standard_uncertainty == pytest.approx(np.std(drawn), rel=4 / math.sqrt(400) + 0.01)


def test_delay_counts_only_where_told() -> None:
    """With the delay included four times grow by it, and so does their variance; nothing else changes."""
    without = derived_quantities(VANE, COVARIANCE, angle_unit="deg")
    with_delay = derived_quantities(VANE, COVARIANCE, angle_unit="deg", delay_included=True)
    for name in DERIVED_NAMES:
        added = VANE[3] if name in FROM_STEP else 0.0
        assert with_delay[name].value == pytest.approx(without[name].value + added, rel=1e-14)
    uncorrelated = np.diag(UNCERTAINTIES**2)
    peak = [
        derived_quantities(VANE, uncorrelated, angle_unit="deg", delay_included=told)["peak_time"].standard_uncertainty
        for told in (False, True)
    ]
    assert peak[1] == pytest.approx(math.hypot(peak[0], UNCERTAINTIES[3]), rel=1e-12)
    later = [derived_quantities([12, 3, 0.12, delay], COVARIANCE, angle_unit="deg") for delay in (-0.5, 0.5)]
    assert later[0]["peak_time"] == later[1]["peak_time"]


def test_a_clock_offset_may_make_a_time_negative() -> None:
    """With the delay included the interval is not cut at zero, because the delay may hold a clock offset."""
    seen = derived_quantities([12, 3, 0.12, -2.0], COVARIANCE, angle_unit="deg", delay_included=True)
    assert seen["peak_time"].interval_95[0] < seen["peak_time"].value < 0


@pytest.mark.parametrize("degrees_of_freedom", [4.0, 30.0, math.inf])
def test_interval_follows_the_degrees_of_freedom(degrees_of_freedom: float) -> None:
    """Where nothing is cut the half-width is Student's factor times the standard uncertainty."""
    seen = derived_quantities(VANE, COVARIANCE, angle_unit="deg", degrees_of_freedom=degrees_of_freedom)
    for name in SMOOTH:
        expected = coverage_factor(degrees_of_freedom) * seen[name].standard_uncertainty
        assert seen[name].expanded_uncertainty == pytest.approx(expected, rel=1e-10)


@pytest.mark.parametrize("delay_included", [False, True])
def test_settling_interval_is_the_range_over_the_joint_region(delay_included: bool) -> None:
    """Thousands of points on and inside the joint 95 % ellipsoid stay inside the interval and nearly fill it.

    Slices are 0.5 % of the damping range apart and linear within: 1 % of the width is allowed outside. The points,
    spread over the surface, come within 5 % of each end.
    """
    from scipy.stats import chi2

    involved = [1, 2, 3] if delay_included else [1, 2]
    centre = VANE.copy()
    centre[2] = damping_from_overshoot(5.0) + 0.004  # the 5 % band lies within the region of the overshoot
    wide = COVARIANCE * 4
    seen = derived_quantities(centre, wide, angle_unit="deg", delay_included=delay_included)["settling_time_5"]
    direction = np.random.default_rng(3).standard_normal((20000, len(involved)))
    direction /= np.linalg.norm(direction, axis=1)[:, None]
    direction[::2] *= np.linspace(0, 1, 10000)[:, None]
    radius = math.sqrt(chi2.ppf(0.95, len(involved)))
    factor = np.linalg.cholesky(wide[np.ix_(involved, involved)])
    points = np.tile(centre, (20000, 1))
    points[:, involved] += radius * direction @ factor.T
    times = normalised_settling_time(points[:, 2], 0.05) / (2 * math.pi * points[:, 1])
    times += points[:, 3] if delay_included else 0
    low, high = seen.interval_95
    width = high - low
    assert low - 0.01 * width <= times.min() <= low + 0.05 * width
    assert high - 0.05 * width <= times.max() <= high + 0.01 * width
    assert width > 0.1 * seen.value, "the jump at the edge of the band must be inside the region"


def test_settling_uncertainty_is_the_propagated_one_where_nothing_jumps() -> None:
    """With a small covariance the standard uncertainty is that of the gradient; second order is below 10⁻³."""
    tight = COVARIANCE * 1e-6
    seen = derived_quantities(VANE, tight, angle_unit="deg")["settling_time_2"]
    step = 1e-7
    gradient = np.array(
        [
            (values(VANE + step * unit)["settling_time_2"] - values(VANE - step * unit)["settling_time_2"]) / (2 * step)
            for unit in np.eye(4)
        ]
    )
    assert seen.standard_uncertainty == pytest.approx(math.sqrt(gradient @ tight @ gradient), rel=1e-3)


@pytest.mark.parametrize("damping", [0.01, 0.12, 0.5, 0.69, 0.705, 0.72, 0.95, 1.0, 1.3, 3.0])
@pytest.mark.parametrize("relative", [0.0, 0.01, 0.1, 0.6])
def test_values_lie_in_intervals_that_are_possible(damping: float, relative: float) -> None:
    """Whatever the uncertainty, an interval holds its value, is finite and not negative, for overshoot within 100 %."""
    point = np.array([12.0, 3.0, damping, 0.02])
    covariance = np.diag((relative * point) ** 2)
    for name, quantity in derived_quantities(point, covariance, angle_unit="deg", degrees_of_freedom=20).items():
        if quantity is None:
            continue
        low, high = quantity.interval_95
        assert 0 <= low <= quantity.value <= high < math.inf
        assert math.isfinite(quantity.standard_uncertainty) and quantity.standard_uncertainty >= 0
        assert name != "percent_overshoot" or high <= 100


@pytest.mark.parametrize(
    ("damping", "uncertainty", "lost"),
    [
        (0.12, 0.002, {}),
        (0.7072, 0.002, {"no_resonance": {"resonance_frequency", "resonance_gain"}}),
        (1.3, 0.01, {"no_resonance": {"resonance_frequency", "resonance_gain"}, "no_peak": {"peak_time"}}),
        (
            0.97,
            0.02,
            {"no_resonance": {"resonance_frequency", "resonance_gain"}, "derived_undetermined": {"peak_time"}},
        ),
        (
            0.02,
            0.011,
            {
                "derived_undetermined": {
                    "resonance_gain", "quality_factor", "settling_time_5", "settling_time_2", "time_constant",
                }
            },
        ),
    ],
)  # fmt: skip
def test_what_does_not_exist_is_none_with_its_reason(
    damping: float, uncertainty: float, lost: dict[str, set[str]]
) -> None:
    """Every None is named by exactly one caveat, and no caveat names anything else."""
    point, covariance = [12.0, 3.0, damping, 0.02], np.diag([0.01, 1e-4, uncertainty**2, 1e-6])
    absent = {name for name, seen in derived_quantities(point, covariance, angle_unit="deg").items() if seen is None}
    caveats = undefined_reasons(point, covariance)
    named = {caveat.code: set(caveat.message.split(":")[0].split(", ")) for caveat in caveats}
    assert named == lost
    assert absent == set().union(*lost.values())


def test_an_unknown_delay_takes_only_what_rests_on_it() -> None:
    """An infinite variance of the delay makes the times from the step None, and leaves the others as they are."""
    covariance = np.diag([0.01, 1e-4, 4e-6, np.inf])
    without = derived_quantities(VANE, covariance, angle_unit="deg")
    assert None not in without.values()
    seen = derived_quantities(VANE, covariance, angle_unit="deg", delay_included=True)
    assert {name for name, quantity in seen.items() if quantity is None} == set(FROM_STEP)
    (caveat,) = undefined_reasons(VANE, covariance, delay_included=True)
    assert caveat.message.endswith("the uncertainty of delay is not known")


def test_a_reversed_sensor_has_the_same_resonance() -> None:
    """The sign of the gain changes no derived quantity."""
    mirror = np.diag([-1.0, 1, 1, 1])
    turned = derived_quantities(mirror @ VANE, mirror @ COVARIANCE @ mirror, angle_unit="deg")
    straight = derived_quantities(VANE, COVARIANCE, angle_unit="deg")
    for name in DERIVED_NAMES:
        assert turned[name].value == straight[name].value
        assert turned[name].standard_uncertainty == pytest.approx(straight[name].standard_uncertainty, rel=1e-12)


def test_time_scale_and_gain_scale_carry_through() -> None:
    """Twice the natural frequency halves every time, doubles every frequency and leaves numbers alone."""
    slow = derived_quantities(VANE, COVARIANCE, angle_unit="deg")
    scale = np.diag([1.0, 2.0, 1.0, 0.5])
    fast = derived_quantities(scale @ VANE, scale @ COVARIANCE @ scale, angle_unit="deg", delay_included=False)
    for name in DERIVED_NAMES:
        factor = {"s": 0.5, "Hz": 2.0}.get(slow[name].unit, 1.0)
        assert fast[name].value == pytest.approx(factor * slow[name].value, rel=1e-12)
        assert fast[name].standard_uncertainty == pytest.approx(factor * slow[name].standard_uncertainty, rel=1e-9)


@pytest.mark.parametrize(
    ("parameters", "covariance", "message"),
    [
        ([12, 3, 0.12], np.zeros((4, 4)), r"parameters of shape \(3,\) .* give \(4,\) and \(4, 4\)"),
        ([12, 3, 0.12, 0], np.zeros((3, 3)), r"covariance of shape \(3, 3\)"),
        ([12, 0, 0.12, 0], np.zeros((4, 4)), "natural_frequency = 0: must be finite"),
        ([12, 3, -0.12, 0], np.zeros((4, 4)), "damping_ratio = -0.12: must be finite, and above 0"),
        ([np.nan, 3, 0.12, 0], np.zeros((4, 4)), "gain = nan: must be finite"),
        ([12, 3, 0.12, 0], np.diag([1, 1, -1, 1]), "variance of damping_ratio is -1, below 0"),
    ],
)
def test_bad_input_is_refused_in_one_line(parameters: list[float], covariance: np.ndarray, message: str) -> None:
    """The message names the quantity, the value and the limit."""
    with pytest.raises(EstimationError, match=message) as caught:
        derived_quantities(parameters, covariance, angle_unit="deg")
    assert "\n" not in str(caught.value)
