"""The agreement strip puts every bar where its numbers say, on the terminal and in the figure."""

from __future__ import annotations

import pytest
from report_rig import cross_check, row

from freqid.report.agreement_scale import half_span, scaled_rows
from freqid.report.agreement_strip import agreement_figure
from freqid.report.agreement_words import agreement_text


def strip_of(text: str, label: str) -> str:
    """The row with this label."""
    return next(line for line in text.splitlines() if line.startswith(label))


@pytest.mark.parametrize("ascii", [False, True])
@pytest.mark.parametrize("width", [60, 80, 121])
def test_text_has_a_row_per_judged_quantity_with_its_verdict_within_the_width(ascii: bool, width: int) -> None:
    """Three of the four compared quantities have a tolerance; each row ends in its own verdict."""
    lines = agreement_text(cross_check(), width, ascii=ascii).splitlines()
    assert len(lines) == 5  # key, three rows, axis
    for line, (label, verdict) in zip(
        lines[1:4], [("gain", "agree"), ("natural frequency", "unresolved"), ("damping ratio", "disagree")], strict=True
    ):
        assert line.startswith(label) and line.endswith(verdict) and len(line) <= width


def test_ascii_text_survives_any_terminal() -> None:
    """Every character is ASCII when asked for."""
    assert agreement_text(cross_check(), 80, ascii=True).isascii()


def test_bars_lie_where_the_intervals_say() -> None:
    """One tolerance apart about a common mean: marks half a tolerance off, bars a quarter to either side."""
    check = cross_check(row("gain", away=1.0, width=0.25, verdict="unresolved"))
    line = agreement_text(check, 105, ascii=True).splitlines()[1]
    one, other = line.index("o"), line.index("x")
    low, high = (n for n, letter in enumerate(line) if letter == "|")
    per_tolerance = (high - low) / 2
    centre = (high + low) / 2
    # a mark stands in the nearest cell, and so do the limits: off by half a cell each, one cell in all
    assert abs((one - centre) / per_tolerance - 0.5) <= 1 / per_tolerance
    assert abs((other - centre) / per_tolerance + 0.5) <= 1 / per_tolerance
    # either end of a bar is rounded to a cell: one cell in all
    assert abs(line.count("=") + 1 - 0.5 * per_tolerance) <= 1.0 + 1e-9


def test_bars_that_cross_a_limit_leave_it_visible() -> None:
    """An interval from -1.5 to +1.5 tolerances crosses both limits; each crossing has a sign of its own."""
    line = agreement_text(cross_check(row("gain", away=0.0, width=1.5, verdict="unresolved")), 80, ascii=True)
    assert strip_of(line, "gain").count("+") == 2


def test_what_leaves_the_axis_ends_in_an_arrow() -> None:
    """An interval of ten tolerances to either side is cut at both edges."""
    check = cross_check(row("gain", away=0.0, width=10, verdict="unresolved"))
    line = strip_of(agreement_text(check, ascii=True), "gain")
    assert "<" in line and ">" in line


def test_undetermined_quantity_is_said_in_words() -> None:
    """A judged quantity that one test did not determine has no bars to compare."""
    one = row("gain", away=0.0, width=0.1, verdict="unresolved")
    missing = type(one)(
        quantity="gain", frequency_test=one.frequency_test, step_test=None, difference=None, en=None, tolerance=0.1,
        verdict="unresolved",
    )  # fmt: skip
    assert "undetermined" in agreement_text(cross_check(missing))
    assert agreement_figure(cross_check(missing)).axes


def test_comparison_without_tolerances_is_one_sentence() -> None:
    """Nothing to judge is said, not drawn as an empty axis."""
    one = row("gain", away=0.0, width=0.1, verdict="not judged")
    bare = type(one)(
        quantity="gain", frequency_test=one.frequency_test, step_test=one.step_test, difference=one.difference,
        en=one.en, tolerance=None, verdict="not judged",
    )  # fmt: skip
    assert len(agreement_text(cross_check(bare)).splitlines()) == 1
    drawn = [text.get_text() for text in agreement_figure(cross_check(bare)).axes[0].texts]
    assert "no quantity has a tolerance" in drawn


def test_figure_ends_each_row_with_its_verdict() -> None:
    """The words of the figure hold one verdict per judged row."""
    words = [text.get_text() for text in agreement_figure(cross_check()).axes[0].texts]
    verdicts = ["agree", "unresolved", "disagree"]
    assert [word for word in words if word in verdicts] == verdicts


def test_scaled_difference_is_that_of_the_two_bars() -> None:
    """Both bars stand symmetrically about zero, and the difference is their distance."""
    (scaled,) = scaled_rows(cross_check(row("gain", away=1.3, width=0.2, verdict="disagree")))
    assert scaled.frequency_test is not None and scaled.step_test is not None and scaled.difference is not None
    # values are 1 ± 0.065, divided by 0.1: rounding 2e-16 / 0.1, a few operations
    assert scaled.frequency_test.value == pytest.approx(0.65, abs=1e-14)
    assert scaled.step_test.value == pytest.approx(-0.65, abs=1e-14)
    assert scaled.difference.value == pytest.approx(1.3, abs=1e-14)
    assert 1.5 < half_span([scaled]) < 4.0
