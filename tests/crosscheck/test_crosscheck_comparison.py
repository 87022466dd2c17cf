"""The verdict by hand-made numbers on either side of every boundary, En against its published example, the joint test
by simulation.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import binom, kstest
from two_tests import NO_PEAK, TIGHT, TOLERANCE, VANE, K, checked, frequency_test, moved, row, step_test

from freqid.crosscheck.comparison import cross_check, difference_of, en_number, joint_test
from freqid.crosscheck.comparison_result import JointTest
from freqid.crosscheck.findings import findings_of_model, findings_of_step, half_power_width
from freqid.errors import CrossCheckError
from freqid.estimate.model import IdentifiedModel
from freqid.estimate.resonance import ResonanceReading
from freqid.quantity import Quantity
from freqid.step_test.step_result import StepResult

# ---- En ----


@pytest.mark.parametrize(("value", "published"), [(1.006, 0.393), (0.996, -0.262), (0.998, -0.131)])
def test_en_reproduces_the_published_example(value: float, published: float) -> None:
    """NIST Dataplot, page "ISO 13528 EN SCORE": reference 1, root sum of squares of both expanded uncertainties
    0.01527.

    Three digits are printed of En, and the four of the denominator leave 3e-4 of it: 5e-4 + 1.3e-4.
    """
    half = 0.01527 / np.sqrt(2) / K
    got = en_number(Quantity.normal(value, "1", half), Quantity.normal(1.0, "1", half))
    assert got == pytest.approx(published, abs=6.3e-4)


def test_en_of_unequal_laboratories() -> None:
    """Expanded uncertainties of 3 and 4 make a denominator of 5; the sign is that of the first."""
    a, b = Quantity.normal(10.0, "V", 3 / K), Quantity.normal(15.0, "V", 4 / K)
    assert en_number(a, b) == pytest.approx(-1.0)
    assert en_number(b, a) == pytest.approx(1.0)


def test_en_uses_the_expanded_uncertainty_of_few_degrees_of_freedom() -> None:
    """With three degrees of freedom the half width is 3.182 standard uncertainties (Student's t, any table)."""
    a, b = Quantity.normal(1.0, "V", 1.0, 3), Quantity.normal(0.0, "V", 0.0)
    assert en_number(a, b) == pytest.approx(1 / 3.182, rel=2e-4)


def test_two_exact_numbers_have_no_en() -> None:
    """Nothing to measure the difference by."""
    exact = Quantity.normal(1.0, "V", 0.0)
    assert en_number(exact, exact) is None


def test_difference_is_first_minus_second_with_both_uncertainties() -> None:
    """3 and 4 make 5, in standard and in expanded uncertainty."""
    d = difference_of(Quantity.normal(10.0, "V", 3.0), Quantity.normal(15.0, "V", 4.0))
    assert (d.value, d.unit) == (-5.0, "V")
    assert d.standard_uncertainty == pytest.approx(5.0)
    assert d.expanded_uncertainty == pytest.approx(5 * K)


# ---- verdict ----

# difference, standard uncertainty of it, both relative to the mean; tolerance of the natural frequency 2 %
BOUNDARIES = [
    # the whole interval within the tolerance
    (0.0, 0.0199 / K, "agree"),
    (0.0, 0.0201 / K, "unresolved"),
    (0.015, 0.0049 / K, "agree"),
    (0.015, 0.0051 / K, "unresolved"),
    # significant, yet within the tolerance: as good as equal for the user
    (0.015, 1e-4, "agree"),
    # beyond the tolerance and significant
    (0.021, 0.0209 / K, "disagree"),
    (0.021, 0.0211 / K, "unresolved"),
    (0.0201, 1e-6, "disagree"),
    (0.0199, 1e-6, "agree"),
    # significant and within the tolerance, the interval reaches beyond it
    (0.019, 0.002 / K, "unresolved"),
]


@pytest.mark.parametrize(("difference", "uncertainty", "verdict"), BOUNDARIES)
@pytest.mark.parametrize("sign", [1, -1])
def test_verdict_on_either_side_of_its_boundaries(
    difference: float, uncertainty: float, verdict: str, sign: int
) -> None:
    """Interval within the tolerance, interval without zero beyond it, anything else; the other rows agree."""
    # x = m (1 + d/2), y = m (1 - d/2): the difference relative to the mean is d exactly
    first, second = (
        moved("natural_frequency", sign * difference / 2),
        moved("natural_frequency", -sign * difference / 2),
    )
    wide = list(TIGHT)
    wide[1] = uncertainty / (1 + sign * difference / 2)
    check = checked(frequency_test(first, tuple(wide)), step_test(second, (1e-4, 0.0, 1e-4, 1e-4)))
    assert row(check, "natural_frequency").verdict == verdict
    assert check.verdict == verdict
    assert row(check, "gain").verdict == row(check, "damping_ratio").verdict == "agree"


def test_one_disagreeing_row_outweighs_the_unresolved() -> None:
    """Damping unresolved, gain in contradiction: the tests disagree, and the sentence names the gain alone."""
    check = checked(frequency_test(moved("gain", 0.2), (1e-3, 1e-4, 0.5, 1e-4)), step_test())
    assert row(check, "damping_ratio").verdict == "unresolved"
    assert check.verdict == "disagree"
    assert check.sentence.startswith("the gain differs by 18.18 % ± ")  # 0.2 / 1.1, to the place of its uncertainty
    assert "beyond the tolerance of 5 %" in check.sentence
    assert "damping" not in check.sentence


def test_agreement_is_said_in_one_sentence_and_ends_the_matter() -> None:
    """No causes, no next test."""
    check = checked(frequency_test(), step_test())
    assert check.verdict == "agree"
    assert check.sentence == "Both tests give the same gain, natural frequency and damping ratio within the tolerances."
    assert check.causes == ()
    assert check.next_test is None


def test_a_reversed_sensor_disagrees() -> None:
    """Gains of opposite sign are as far apart as can be."""
    check = checked(frequency_test(VANE * [-1, 1, 1, 1]), step_test())
    assert check.verdict == "disagree"
    gain = row(check, "gain")
    assert gain.difference is not None
    assert gain.difference.value == pytest.approx(-24.0)


def test_swapping_the_tests_turns_the_difference_round_and_keeps_the_verdict() -> None:
    """No test is the reference."""
    one, other = moved("damping_ratio", 0.08), VANE
    uncertain = (1e-4, 1e-4, 0.02, 1e-4)
    a = checked(frequency_test(one, uncertain), step_test(other, uncertain))
    b = checked(frequency_test(other, uncertain), step_test(one, uncertain))
    first, second = row(a, "damping_ratio"), row(b, "damping_ratio")
    assert first.en == pytest.approx(-second.en)
    assert first.tolerance == pytest.approx(second.tolerance)
    assert first.verdict == second.verdict


def test_a_quantity_without_a_tolerance_is_shown_and_not_judged() -> None:
    """The verdict rests on the others."""
    check = cross_check(
        frequency_test(moved("gain", 0.5)),
        step_test(),
        tolerance={"natural_frequency": 0.02, "damping_ratio": 0.1},
        resonance=NO_PEAK,
    )
    assert row(check, "gain").verdict == "not judged"
    assert row(check, "gain").reason == "no tolerance in the rig sheet"
    assert check.verdict == "agree"


def test_without_any_tolerance_nothing_agrees() -> None:
    """Not to have looked is not agreement."""
    check = cross_check(frequency_test(), step_test(), tolerance={}, resonance=NO_PEAK)
    assert check.verdict == "unresolved"


@pytest.mark.parametrize("which", ["frequency", "step"])
def test_an_undetermined_parameter_leaves_it_unresolved(which: str) -> None:
    """What one test could not determine cannot agree; the sentence and the next test say so."""
    first = replace(frequency_test(), undetermined=("damping_ratio",) if which == "frequency" else ())
    second = replace(step_test(), undetermined=("damping_ratio",) if which == "step" else ())
    check = checked(first, second)
    assert row(check, "damping_ratio").verdict == "unresolved"
    assert row(check, "damping_ratio").difference is None
    assert check.verdict == "unresolved"
    assert check.sentence == "the damping ratio is not determined by both tests."
    assert check.next_test is not None
    assert "damping ratio: not determined by both tests" in check.next_test.reason


def test_different_angle_units_are_refused() -> None:
    """Degrees against radians: nothing to compare."""
    with pytest.raises(CrossCheckError) as told:
        checked(replace(frequency_test(), angle_unit="rad"), step_test())
    assert str(told.value) == ("the frequency test is in rad, the step test in deg: repeat one with the same rig sheet")


# ---- rows for the eye ----


@pytest.mark.parametrize(("first", "second"), [(True, False), (False, True), (False, False)])
def test_a_delay_with_a_clock_offset_in_it_is_not_compared(first: bool, second: bool) -> None:
    """Either log on its own clock spoils the comparison."""
    delay = row(checked(frequency_test(common=first), step_test(common=second)), "delay")
    assert (delay.verdict, delay.difference) == ("not judged", None)
    assert delay.reason == "contains the unknown offset between the clocks"


def test_delays_on_common_clocks_are_compared_for_the_eye() -> None:
    """Shown with its difference; judged it is not, for the sheet gives it no tolerance."""
    delay = row(checked(frequency_test(moved("delay", 0.5)), step_test()), "delay")
    assert delay.difference is not None
    assert delay.difference.value == pytest.approx(0.01)
    assert delay.verdict == "not judged"


def test_half_power_width_follows_from_the_step_test() -> None:
    """Closed form fn (sqrt(1 - 2 z^2 + 2 z r) - sqrt(1 - 2 z^2 - 2 z r)), r = sqrt(1 - z^2); uncertainty by the chain
    rule.
    """
    fn, z = 3.0, 0.12

    def width(fn: float, z: float) -> float:
        x, r = 1 - 2 * z**2, 2 * z * np.sqrt(1 - z**2)
        return float(fn * (np.sqrt(x + r) - np.sqrt(x - r)))

    step = step_test(relative=(1e-4, 0.01, 0.05, 1e-4))
    q = half_power_width(step.model, step.covariance)
    assert q is not None
    assert q.value == pytest.approx(width(fn, z), rel=1e-9)
    h = 1e-6
    slope_fn = (width(fn + h, z) - width(fn - h, z)) / (2 * h)
    slope_z = (width(fn, z + h) - width(fn, z - h)) / (2 * h)
    assert q.standard_uncertainty == pytest.approx(np.hypot(slope_fn * 0.01 * fn, slope_z * 0.05 * z), rel=1e-5)
    wide = step_test(VANE * [1, 1, 5, 1])
    assert half_power_width(wide.model, wide.covariance) is None  # zeta 0.6: no lower half-power frequency


def test_the_measured_peak_stands_beside_the_step_tests_prediction() -> None:
    """Resonance frequency, gain and width, each with En, none judged; without a peak the reason is told."""
    reading = ResonanceReading(
        resonance_frequency=Quantity.normal(2.956, "Hz", 0.001),
        resonance_gain=Quantity.normal(50.4, "deg/V", 0.1),
        half_power_width=Quantity.normal(0.727, "Hz", 0.003),
    )
    check = cross_check(frequency_test(), step_test(), tolerance=TOLERANCE, resonance=reading)
    expected = {
        "resonance_frequency": 3 * np.sqrt(1 - 2 * 0.12**2),
        "resonance_gain": 12 / (2 * 0.12 * np.sqrt(1 - 0.12**2)),
    }
    for name, value in expected.items():
        second = row(check, name).step_test
        assert second is not None
        assert second.value == pytest.approx(value, rel=1e-9)
        assert row(check, name).en is not None
        assert row(check, name).verdict == "not judged"
    assert row(checked(frequency_test(), step_test()), "resonance_gain").reason == NO_PEAK


# ---- joint test ----


def joint(first: IdentifiedModel, second: StepResult) -> JointTest | None:
    """The joint test of both, without a measured peak."""
    return joint_test(findings_of_model(first, NO_PEAK), findings_of_step(second))


def test_joint_statistic_by_hand() -> None:
    """Independent parameters: the sum of the squared differences in joint standard uncertainties."""
    relative = (0.01, 0.002, 0.03, 0.1)
    first = frequency_test(VANE * [1.02, 1.003, 0.95, 3.0], relative)
    found = joint(first, step_test(VANE, relative))
    assert found is not None
    assert found.degrees_of_freedom == 3
    variances = (np.array(relative[:3]) * VANE[:3] * [1.02, 1.003, 0.95]) ** 2 + (
        np.array(relative[:3]) * VANE[:3]
    ) ** 2
    expected = np.sum((VANE[:3] * [0.02, 0.003, -0.05]) ** 2 / variances)
    assert found.statistic == pytest.approx(expected, rel=1e-9)


def test_joint_test_has_the_false_alarms_it_claims() -> None:
    """500 pairs drawn with strong correlations: p-values uniform (Kolmogorov-Smirnov and binomial, both at 1e-4)."""
    correlation = np.array([[1, 0.3, 0.8, 0], [0.3, 1, 0.1, 0], [0.8, 0.1, 1, 0], [0, 0, 0, 1]])
    rng, p_values = np.random.default_rng(1), []
    scales = [np.array([0.05, 0.01, 0.002, 1e-4]), np.array([0.15, 0.004, 0.006, 1e-4])]
    covariances = [correlation * np.outer(s, s) for s in scales]
    for _ in range(500):
        one, other = (rng.multivariate_normal(VANE, c) for c in covariances)
        first = replace(frequency_test(one), covariance=covariances[0])
        second = replace(step_test(other), covariance=covariances[1])
        found = joint(first, second)
        assert found is not None
        p_values.append(found.p_value)
    low, high = binom.ppf([1e-4, 1 - 1e-4], 500, 0.05)
    assert low <= np.sum(np.array(p_values) < 0.05) <= high
    assert kstest(p_values, "uniform").pvalue > 1e-4


def test_without_uncertainty_there_is_no_joint_test() -> None:
    """A covariance of zero whitens nothing."""
    nothing = (0.0, 0.0, 0.0, 0.0)
    assert joint(frequency_test(relative=nothing), step_test(relative=nothing)) is None
