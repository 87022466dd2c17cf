"""An old sheet's numbers in all the forms people type, and what is refused with what to write instead."""

from __future__ import annotations

import math

import pytest
from two_tests import NO_PEAK, TOLERANCE, frequency_test, step_test

from freqid.crosscheck.comparison import compare
from freqid.crosscheck.findings import findings_of_model, findings_of_step
from freqid.crosscheck.typed_values import parse_typed_values
from freqid.errors import CrossCheckError
from freqid.quantity import Quantity

K = 1.959963984540054


def typed(text: str) -> tuple[str, Quantity]:
    """The one quantity in a text."""
    found = parse_typed_values([text], angle_unit="deg").findings
    ((name, quantity),) = {**found.parameters, **found.measured}.items()
    assert quantity is not None
    return name, quantity


FORMS = [
    ("gain=12 ± 0.3", "gain", 12.0, 0.3 / K),
    ("gain=12±0.3", "gain", 12.0, 0.3 / K),
    ("gain = 12 +- 0.3 deg/V", "gain", 12.0, 0.3 / K),
    ("gain=12 +/- 0.3", "gain", 12.0, 0.3 / K),
    ("gain=12 ± 2.5 %", "gain", 12.0, 0.3 / K),
    ("gain=-12 ± 2.5%", "gain", -12.0, 0.3 / K),
    # JCGM 100:2008, 7.2.2: digits in brackets count in the last place, a number with a point as it stands
    ("gain=12.0(3)", "gain", 12.0, 0.3),
    ("gain=12(0.3)", "gain", 12.0, 0.3),
    ("gain=100.02147(35)", "gain", 100.02147, 0.00035),
    ("gain=12(3)", "gain", 12.0, 3.0),
    ("natural frequency = 18.85 ± 0.1 rad/s", "natural_frequency", 18.85 / (2 * math.pi), 0.1 / K / (2 * math.pi)),
    ("damping-ratio=12(0.5) %", "damping_ratio", 0.12, 0.005),
    ("rise_time_0_90=85 ± 2 ms", "rise_time_0_90", 0.085, 0.002 / K),
    ("delay=2e-2(0.001)", "delay", 0.02, 0.001),
    ("gain=12", "gain", 12.0, 0.0),
]


@pytest.mark.parametrize(("text", "name", "value", "uncertainty"), FORMS)
def test_every_form_of_a_number_is_read(text: str, name: str, value: float, uncertainty: float) -> None:
    """± is a 95 % half width, brackets are a standard uncertainty; units are converted."""
    got, quantity = typed(text)
    assert got == name
    assert quantity.value == pytest.approx(value, rel=1e-12)
    assert quantity.standard_uncertainty == pytest.approx(uncertainty, rel=1e-12)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("gain", "cannot be read; write for example"),
        ("gain=12,5 ± 0.3", "use a point for the decimals"),
        ("gain=twelve", "cannot be read"),
        ("damping=0.12", "did you mean 'damping_ratio'?"),
        ("torque=3", "known are gain, natural_frequency"),
        ("gain=12 ± 0.3 Hz", "the unit 'Hz' does not fit; give deg/V, or none"),
        ("gain=12 ± -0.3", "must not be negative"),
        ("natural_frequency=-3", "must be above 0"),
        ("gain=nan", "cannot be read"),
        ("gain=12(-0.3)", "must not be negative"),
        ("gain=1e400", "must be below 1e+30"),
        ("gain=12 ± 1e400", "the uncertainty must be below 1e+30"),
        ("gain=12(1e400)", "the uncertainty must be below 1e+30"),
        ("gain=0", "must not be 0"),
        ("peak_time=0 s", "peak_time = 0 s: must be above 0"),
        ("settling_time_5=-1", "must be above 0"),
        ("log_decrement=-1", "must be above 0"),
        ("percent_overshoot=150", "must be at least 0 and below 100 %"),
        ("percent_overshoot=-5", "must be at least 0 and below 100 %"),
    ],
)
def test_what_cannot_be_read_is_refused(text: str, said: str) -> None:
    """One line with the text and what to write."""
    with pytest.raises(CrossCheckError) as told:
        parse_typed_values([text], angle_unit="deg")
    assert said in str(told.value)
    assert text in str(told.value)
    assert "\n" not in str(told.value)


def test_a_quantity_given_twice_is_refused() -> None:
    """Which one would hold?"""
    with pytest.raises(CrossCheckError, match="gain is given twice"):
        parse_typed_values(["gain=12", "gain=13"], angle_unit="deg")


def test_overshoot_and_peak_time_stand_for_damping_and_frequency() -> None:
    """20 % is a damping ratio of 0.45595 (any text); wn tp = pi / sqrt(1 - z^2); du = |dz/dOS| u.

    z = L / sqrt(pi^2 + L^2), L = ln(100 / OS): dz/dOS = -pi^2 / (pi^2 + L^2)^1.5 / OS; the curvature over ± u makes
    2nd-order terms of (u / OS)^2 = 2.5e-3 of it.
    """
    found = parse_typed_values(["percent_overshoot=20(1)", "peak_time=0.2(0.002)"], angle_unit="deg").findings
    damping, frequency = found.parameters["damping_ratio"], found.parameters["natural_frequency"]
    assert damping is not None
    assert frequency is not None
    log = math.log(5)
    assert damping.value == pytest.approx(0.45595, abs=5e-6)
    slope = math.pi**2 / (math.pi**2 + log**2) ** 1.5 / 20
    assert damping.standard_uncertainty == pytest.approx(slope, rel=5e-3)
    assert frequency.value == pytest.approx(1 / (2 * 0.2 * math.sqrt(1 - damping.value**2)), rel=1e-9)
    assert frequency.standard_uncertainty > 0.01 * frequency.value * 0.99  # at least that of the peak time


@pytest.mark.parametrize(
    "texts",
    [
        ["percent_overshoot=60(5)", "peak_time=0.1(0.1)"],
        ["percent_overshoot=68 ± 90", "peak_time=0.1 ± 0.2"],
        ["log_decrement=0.7(2.0)", "peak_time=0.1"],
        ["damping_ratio=0.5(0.5)", "peak_time=0.1"],
    ],
)
def test_an_uncertainty_as_wide_as_the_value_is_carried_through(texts: list[str]) -> None:
    """Where one standard uncertainty reaches beyond 0 or 100 % the slope is taken nearer; the result stays finite."""
    found = parse_typed_values(texts, angle_unit="deg").findings.parameters
    for name in ("damping_ratio", "natural_frequency"):
        quantity = found[name]
        assert quantity is not None
        assert math.isfinite(quantity.standard_uncertainty)
        assert quantity.standard_uncertainty > 0.0


def test_an_overshoot_of_nothing_says_nothing_of_the_damping() -> None:
    """0 % means at least critically damped: no damping ratio is worked out, and no frequency."""
    found = parse_typed_values(["percent_overshoot=0", "peak_time=0.2"], angle_unit="deg").findings
    assert set(found.parameters) == set()


def test_a_sheet_is_compared_in_what_it_tells() -> None:
    """Rows for the typed quantities alone; exact numbers are named; the verdict rests on them."""
    sheet = parse_typed_values(["gain=12.1 ± 0.2", "percent_overshoot=68(0.5)"], angle_unit="deg")
    assert sheet.exact == ()
    check = compare(findings_of_model(frequency_test(), NO_PEAK), sheet.findings, tolerance=TOLERANCE)
    assert [row.quantity for row in check.compared] == ["gain", "damping_ratio", "percent_overshoot"]
    assert check.labels == ("frequency test", "typed values")
    assert check.verdict == "agree"
    assert check.sentence == "Both tests give the same gain and damping ratio within the tolerances."
    assert check.joint is not None
    assert check.joint.degrees_of_freedom == 2
    assert parse_typed_values(["gain=12"], angle_unit="deg").exact == ("gain",)


def test_nothing_in_common_is_refused() -> None:
    """A sheet without one number that the test has."""
    sheet = parse_typed_values(["half_power_width=0.7 ± 0.1"], angle_unit="deg").findings
    other = parse_typed_values(["gain=12 ± 1"], angle_unit="deg").findings
    with pytest.raises(CrossCheckError, match="no quantity in common"):
        compare(sheet, other, tolerance=TOLERANCE)


def test_a_step_test_is_compared_with_its_read_offs() -> None:
    """A typed static behaviour stands beside what was read off, the gain beside the fitted one."""
    sheet = parse_typed_values(["gain=12 ± 0.1"], angle_unit="deg").findings
    check = compare(findings_of_step(step_test()), sheet, tolerance=TOLERANCE)
    assert [row.quantity for row in check.compared] == ["gain", "static_gain"]
