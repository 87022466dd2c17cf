"""Every value of `reference_data`, computed by the product's functions and compared."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import pytest

from freqid.errors import FreqidError
from freqid.published_quantities import QUANTITIES
from freqid.published_values import (
    STATUSES,
    PublishedValue,
    ValueCheck,
    check_published_values,
    read_published_values,
)

ENTRIES = read_published_values()
ENTRY = """
[[entry]]
row = "1"
quantity = "percent_overshoot"
inputs = { damping_ratio = 0.5 }
published = 16.3
unit = "%"
rounding = 0.05
tolerance = 0.05
tolerance_reason = "rounding"
status = "confirmed"
source = "a text"
"""


@pytest.mark.parametrize("entry", ENTRIES, ids=lambda entry: f"{entry.file.removesuffix('.toml')}-{entry.label}")
def test_published_value_is_reproduced(entry: PublishedValue) -> None:
    """Computed and published differ by no more than the tolerance, whose reason stands in the entry."""
    (check,) = check_published_values([entry])
    assert check.passed, (
        f"published {entry.published} {entry.unit}, computed {check.computed}, deviation {check.deviation}, "
        f"tolerance {entry.tolerance} ({entry.tolerance_reason}); {entry.source}"
    )


@pytest.mark.parametrize("quantity", sorted(QUANTITIES))
def test_every_quantity_is_checked_and_its_check_can_fail(quantity: str) -> None:
    """Each quantity has an entry, and a value changed by three tolerances, either way, is not accepted."""
    entry = next(entry for entry in ENTRIES if entry.quantity == quantity)
    (check,) = check_published_values([entry])
    tolerance = entry.tolerance * (1 if entry.rule_error_percent is None else check.computed / 100)
    for shift in (-3 * tolerance, 3 * tolerance):
        shifted = dataclasses.replace(entry, published=entry.published + shift)
        assert not ValueCheck(entry=shifted, computed=check.computed).passed


def test_entries_say_where_they_come_from_and_how_sure_they_are() -> None:
    """Source, reason and status are there, a printed value is not checked more finely than it is printed."""
    for entry in ENTRIES:
        assert entry.source.strip() and entry.tolerance_reason.strip()
        assert entry.status in STATUSES
        assert entry.rounding > 0
        assert entry.rule_error_percent is not None or entry.tolerance >= entry.rounding


def test_a_rule_of_thumb_is_compared_with_its_known_error() -> None:
    """4/ζ at ζ = 0.8 passes for being 33 % off; the exact value in its place does not."""
    rule = next(entry for entry in ENTRIES if entry.rule_error_percent is not None and entry.published == 5.0)
    (check,) = check_published_values([rule])
    assert check.passed and 30 < check.deviation < 35
    exact = dataclasses.replace(rule, published=check.computed)
    assert not ValueCheck(entry=exact, computed=check.computed).passed


def test_a_list_is_spread_over_the_entries_and_defaults_fill_what_is_missing(tmp_path: Path) -> None:
    """One row of a table becomes one entry for each place; a single value counts for all."""
    text = ENTRY.replace("damping_ratio = 0.5", "damping_ratio = [0.5, 0.6]").replace("= 16.3", "= [16.3, 9.5]")
    text = '[defaults]\nsource = "another"\nconditions = "in air"\n' + text
    (tmp_path / "été.toml").write_text(text, encoding="utf-8")
    first, second = read_published_values(tmp_path)
    assert (first.inputs["damping_ratio"], first.published) == (0.5, 16.3)
    assert (second.inputs["damping_ratio"], second.published) == (0.6, 9.5)
    assert (first.source, second.conditions, second.rounding) == ("a text", "in air", 0.05)


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ('unit = "%"\n', "", "entry 1: missing keys: unit; unknown: -"),
        ("rounding", "roundign", "missing keys: rounding; unknown: roundign"),
        ("percent_overshoot", "overshot", "quantity = 'overshot' is none that can be computed"),
        ('"confirmed"', '"sure"', "status = 'sure': must be one of confirmed, from memory"),
        ("tolerance = 0.05", "tolerance = 0", "tolerance = 0: must be above 0"),
        ("tolerance = 0.05", "tolerance = nan", "tolerance = nan: must be above 0"),
        ("damping_ratio = 0.5", "damping_ratio = [0.5, 0.6, 0.7]", None),
        ("16.3", "[16.3, 9.5]", None),
        ('row = "1"', 'row = ["1", "2", "3"]\nconditions = ["a", "b"]', "a list of 2 beside one of 3"),
        ("[[entry]]", "[[entry", "values.toml: not readable as TOML"),
    ],
)
def test_a_faulty_file_is_refused_by_name(tmp_path: Path, old: str, new: str, message: str | None) -> None:
    """The message names file, entry and key; a list beside single values is no fault."""
    (tmp_path / "values.toml").write_text(ENTRY.replace(old, new), encoding="utf-8")
    if message is None:
        assert len(read_published_values(tmp_path)) > 1
        return
    with pytest.raises(FreqidError, match=r"values\.toml") as caught:
        read_published_values(tmp_path)
    assert message in str(caught.value) and "\n" not in str(caught.value)


def test_a_missing_folder_is_told(tmp_path: Path) -> None:
    """Nothing to check is a fault, not a pass."""
    with pytest.raises(FreqidError, match="no reference values"):
        read_published_values(tmp_path / "none")
