"""The rig sheet: what is read, what is refused and with which words, and the template that explains it."""

from __future__ import annotations

import re
import tomllib
from dataclasses import MISSING, fields
from pathlib import Path

import pytest

from freqid.errors import RigSheetError
from freqid.rig import TABLES, Rig, parse_rig, read_rig
from freqid.rig_tables import KeyRule, Range
from freqid.rig_template import built_in_vane, rig_sheet_text

REQUIRED = {
    "rig": {"name": "bench vane", "angle_unit": "deg"},
    "limits": {"voltage": 5.0, "slew_rate": 500.0, "angle": 30.0},
    "output": {"sample_rate": 1000.0, "hold": "zero-order", "full_scale": 10.0},
    "angle_sensor": {"sample_rate": 60.0, "exposure": 0.004, "stamp": "end", "noise": 0.3},
}

KEYS = [(table, key.name, key.metadata["rule"]) for table, owner in TABLES.items() for key in fields(owner)]
NUMBERS = [(table, key, rule.allowed) for table, key, rule in KEYS if isinstance(rule.allowed, Range)]


def sheet(**changes: dict[str, object]) -> str:
    """A sheet of the required keys, changed; the value None takes a key out."""
    tables = {name: {**REQUIRED.get(name, {}), **changes.get(name, {})} for name in {**REQUIRED, **changes}}
    lines = []
    for name, keys in tables.items():
        lines.append(f"[{name}]")
        lines += [f"{key} = {toml(value)}" for key, value in keys.items() if value is not None]
    return "\n".join(lines)


def toml(value: object) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    return f'"{value}"' if isinstance(value, str) else repr(value)


def refusal(text: str) -> str:
    with pytest.raises(RigSheetError) as caught:
        parse_rig(text, "rig.toml")
    message = str(caught.value)
    assert "\n" not in message
    return message


def test_template_is_the_vane_of_the_contract() -> None:
    """The template parses to the values of the design's rig sheet and to a plausible simulated rig beside it."""
    rig = built_in_vane()
    assert (rig.name, rig.angle_unit) == ("spring-centred vane", "deg")
    assert (rig.limits.voltage, rig.limits.slew_rate, rig.limits.angle, rig.limits.bias) == (5.0, 500.0, 30.0, 0.0)
    assert (rig.output.sample_rate, rig.output.hold, rig.output.full_scale) == (1000.0, "zero-order", 10.0)
    sensor = rig.angle_sensor
    assert (sensor.sample_rate, sensor.exposure, sensor.stamp, sensor.noise, sensor.full_scale) == (
        60.0, 0.004, "end", 0.3, 45.0)  # fmt: skip
    step = rig.step_test
    assert (step.gain, step.natural_frequency, step.damping_ratio, step.delay) == (12.0, 3.0, 0.12, 0.02)
    assert (step.gain_uncertainty, step.natural_frequency_uncertainty, step.damping_ratio_uncertainty) == (
        0.05, 0.05, 0.20)  # fmt: skip
    assert (rig.tolerance.gain, rig.tolerance.natural_frequency, rig.tolerance.damping_ratio) == (0.05, 0.02, 0.10)
    assert (rig.simulated.gain, rig.simulated.natural_frequency, rig.simulated.damping_ratio) == (12.1, 3.02, 0.118)


def test_template_explains_every_key() -> None:
    """Each key stands on a line of the template with its explanation, and nothing but known keys does."""
    text = rig_sheet_text()
    for table, key, rule in KEYS:
        block = text.split(f"[{table}]")[1].split("\n[")[0]
        lines = [line for line in block.splitlines() if re.match(rf"(# )?{key} =", line)]
        assert len(lines) == 1
        assert rule.explanation in lines[0].split("# ", 1)[1]
    written = {(table, key) for table, keys in tomllib.loads(text).items() for key in keys}
    assert written <= {(table, key) for table, key, _ in KEYS}


def test_template_values_lie_in_their_own_ranges() -> None:
    """Each default of a key obeys the rule of that key."""
    for _, owner in TABLES.items():
        for key in fields(owner):
            rule: KeyRule = key.metadata["rule"]
            if isinstance(rule.allowed, Range) and key.default not in (MISSING, None):
                assert key.default in rule.allowed


def test_sheet_with_only_required_keys_takes_the_stated_defaults() -> None:
    """Without [step_test], [tolerance] and [simulated] the step test is unknown and the tolerances are the usual."""
    rig = parse_rig(sheet())
    assert rig.step_test.gain is None and not rig.step_test.predicts_swing
    assert rig.step_test.damping_ratio_uncertainty == 0.20
    assert (rig.tolerance.gain, rig.tolerance.natural_frequency, rig.tolerance.damping_ratio) == (0.05, 0.02, 0.10)
    assert rig.simulated.natural_frequency is None and rig.simulated.noise == 0.3
    assert rig.simulated.clock_ratio_ppm == 0.0 and rig.simulated.common_clock is False
    assert rig.angle_sensor.full_scale is None


def test_simulated_rig_follows_the_step_test_where_it_is_silent() -> None:
    """A key missing from [simulated] is that of [step_test]; one given there wins, also a negative gain."""
    known = {"gain": 12.0, "natural_frequency": 3.0, "damping_ratio": 0.12}
    rig = parse_rig(sheet(step_test=known, simulated={"gain": -11.0}))
    assert rig.simulated.gain == -11.0
    assert (rig.simulated.natural_frequency, rig.simulated.damping_ratio) == (3.0, 0.12)
    assert rig.simulated.delay is None
    assert rig.step_test.predicts_swing


def test_whole_numbers_and_a_byte_order_mark_are_welcome(tmp_path: Path) -> None:
    """`voltage = 5` is a number, and an editor's byte-order mark does no harm, in a folder with a space and an é."""
    path = tmp_path / "a bench é" / "rig.toml"
    path.parent.mkdir()
    path.write_text(sheet(limits={"voltage": 5}), encoding="utf-8-sig")
    rig = read_rig(path)
    assert isinstance(rig, Rig) and isinstance(rig.limits.voltage, float) and rig.limits.voltage == 5.0


@pytest.mark.parametrize(("table", "key", "allowed"), NUMBERS, ids=[f"{t}.{k}" for t, k, _ in NUMBERS])
def test_every_number_is_held_to_its_range(table: str, key: str, allowed: Range) -> None:
    """Just outside each end, and not finite, a number is refused with table, key, value and range."""
    outside = [allowed.low if allowed.low_open else allowed.low - 1, allowed.high if allowed.high_open else
               allowed.high + 1]  # fmt: skip
    for value in (*outside, float("nan"), float("inf")):
        message = refusal(sheet(**{table: {key: value}}))
        assert message.startswith(f"rig.toml: [{table}] {key} = ")
        assert str(allowed) in message
    assert str(outside[1]) in refusal(sheet(**{table: {key: outside[1]}}))


@pytest.mark.parametrize(("table", "key", "rule"), KEYS, ids=[f"{t}.{k}" for t, k, _ in KEYS])
def test_every_key_refuses_a_wrong_type(table: str, key: str, rule: KeyRule) -> None:
    """A number where text belongs, text where a number belongs, and yes where either belongs are refused by name."""
    wrong: list[object] = [[1.0], "12 V" if isinstance(rule.allowed, Range) else 3.5]
    if rule.allowed is not bool:
        wrong.append(True)
    for value in wrong:
        assert f"[{table}] {key} = {value!r}: must be" in refusal(sheet(**{table: {key: value}}))


@pytest.mark.parametrize(("table", "key", "rule"), KEYS, ids=[f"{t}.{k}" for t, k, _ in KEYS])
def test_every_misspelt_key_is_answered_with_the_right_one(table: str, key: str, rule: KeyRule) -> None:
    """A key with its last letter doubled or in capitals is refused, and the key that was meant is named."""
    for wrong in (key + key[-1], key.upper()):
        message = refusal(sheet(**{table: {wrong: 1.0}}))
        assert f"[{table}] unknown key {wrong!r}" in message
        assert f"did you mean '{key}'?" in message


@pytest.mark.parametrize(("table", "key"), [(table, key) for table, keys in REQUIRED.items() for key in keys])
def test_every_missing_required_key_is_named(table: str, key: str) -> None:
    """Without a key that has no default the sheet is refused, with table, key and what it means."""
    message = refusal(sheet(**{table: {key: None}}))
    assert f"[{table}] {key} is missing (" in message


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (sheet(limitz={"voltage": 1.0}), r"unknown table \[limitz\]; did you mean 'limits'\?"),
        (sheet(zzz={}), r"unknown table \[zzz\]; known are rig, limits, output"),
        ("colour = 3\n" + sheet(), r"unknown table \[colour\]"),
        ("limits = 5\n", r"limits = 5: must be a table; write \[limits\]"),
        (sheet().replace("[limits]", "[[limits]]"), r"limits = \[\{.*must be a table"),
        (sheet(output={"stamp": "end"}), r"\[output\] unknown key 'stamp'; it belongs in \[angle_sensor\]"),
        (sheet(rig={"colour": 1}), r"\[rig\] unknown key 'colour'; known are name, angle_unit"),
        (sheet(rig={"name": ""}), r"\[rig\] name = '': must be a text in quotes, not empty"),
        (sheet(rig={"angle_unit": "degree"}), r"\[rig\] angle_unit = 'degree': must be \"deg\" or \"rad\""),
        (sheet(output={"hold": "first-order"}), r"\[output\] hold = .*must be \"zero-order\" or \"smooth\""),
        (sheet(angle_sensor={"stamp": "late"}), r"\[angle_sensor\] stamp = .*\"start\" or \"middle\" or \"end\""),
        (sheet(simulated={"common_clock": 1}), r"\[simulated\] common_clock = 1: must be true or false"),
        (sheet(limits={"bias": -5.0}), r"\[limits\] bias = -5: must lie inside ±voltage = ±5 V"),
        (sheet(angle_sensor={"exposure": 0.02}), r"exposure = 0\.02: must be at most the frame interval, 0\.01667 s"),
        (sheet() + "\nvoltage 5\n", r"not valid TOML: .*line \d+"),
        (sheet().replace("voltage = 5.0", "voltage = 1" + "0" * 400), r"voltage = 10+\.\.\.: must be a number above 0"),
        (sheet().replace("voltage = 5.0", "voltage = 1" + "0" * 5000), r"not valid TOML: "),
        ("name = " + "[" * 20000, r"not valid TOML: "),
        ("", r"\[rig\] name is missing"),
    ],
)
def test_other_faults_of_the_sheet(text: str, expected: str) -> None:
    """Unknown tables, tables that are none, wrong words and contradictions are each answered in one line."""
    assert re.search(expected, refusal(text))


def test_syntax_fault_names_its_line() -> None:
    """The line of a TOML fault is the line of the file."""
    assert "line 2" in refusal('[rig]\nname = "vane\n')


def test_missing_and_badly_encoded_files_are_told(tmp_path: Path) -> None:
    """No file, and a file in another encoding, are refused with the file name and what to do."""
    path = tmp_path / "rig.toml"
    with pytest.raises(RigSheetError, match="no such rig sheet; `freqid new"):
        read_rig(path)
    path.write_bytes('[rig]\nname = "Prüfstand"\n'.encode("latin-1"))
    with pytest.raises(RigSheetError, match=r"rig\.toml: not UTF-8 text \(byte \d+\); save the file as UTF-8"):
        read_rig(path)


def test_rig_cannot_be_changed() -> None:
    """A rig once read stays as it was read."""
    with pytest.raises(AttributeError):
        built_in_vane().limits.voltage = 6.0  # type: ignore[misc]
