"""freqid excite: what is designed stays within the limits, is told, and is written whole or not at all."""

from __future__ import annotations

import itertools
import json
import os
from typing import Any

import numpy as np
import pytest
from scipy.signal import cont2discrete, lfilter

from excitation.profile import Profile
from excitation.profile_file import read_profile
from freqid.cli import main
from freqid.test_folder import TestFolder

SHORT = ("--duration", "12", "--band", "1", "8")
FILES = ("profile.csv", "profile.h5", "profile.json", "profile.wav")


@pytest.fixture
def figure() -> None:
    """Asked for by a test that looks at the figure."""


@pytest.fixture(autouse=True)
def undrawn(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> None:
    """Nothing is drawn where no test looks at it: the drawing takes longer than the design."""
    if "figure" not in request.fixturenames:
        monkeypatch.setattr("freqid.stages.excite._drawn", lambda *_: None)


def designed(folder: TestFolder, capsys: pytest.CaptureFixture[str], *words: str) -> dict[str, Any]:
    """What `freqid excite FOLDER --json` tells."""
    assert main(["excite", str(folder.path), "--json", *words]) == 0
    told: dict[str, Any] = json.loads(capsys.readouterr().out)
    return told


def simulated_swing(profile: Profile, *, gain: float, natural_frequency: float, damping_ratio: float) -> float:
    """Peak angle at the sampling instants, by exact discretisation of the held input: independent of the design."""
    wn = 2 * np.pi * natural_frequency
    system = ([gain * wn**2], [1, 2 * damping_ratio * wn, wn**2])
    numerator, denominator, _ = cont2discrete(system, 1 / profile.sample_rate, method="zoh")
    rest = np.zeros(round(3 * profile.sample_rate))
    voltage = np.concatenate([profile.voltage - profile.bias, rest])
    return float(np.max(np.abs(lfilter(numerator[0], denominator, voltage))))


@pytest.mark.parametrize("kind", ["multisine", "swept-sine", "step"])
def test_rig_stays_clear_of_its_stops_all_over_the_box(
    kind: str, folder: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """No rig of the step test's box reaches the stops, and the worst swings at least as far as predicted."""
    words = ("--kind", kind) if kind == "step" else ("--kind", kind, *SHORT)
    told = designed(folder, capsys, *words)
    profile = read_profile(folder.profile("step" if kind == "step" else "response"))
    swings = [
        simulated_swing(profile, gain=12 * 1.05, natural_frequency=frequency, damping_ratio=damping)
        for frequency, damping in itertools.product(np.linspace(2.85, 3.15, 7), (0.096, 0.12, 0.144))
    ]
    assert max(swings) < 30.0
    # The design allows 0.9 of 30 deg = 27 deg to the rigs it looks at, which are among these. Seen only at 250 Hz, a
    # peak of the fastest line is missed by at most 1 - cos(pi * 12 / 250) = 1.1 %; rigs in between may swing further.
    assert told["prediction"]["swing"] == pytest.approx(27.0, rel=1e-3)
    assert max(swings) > 27.0 * (1 - 0.012)


def test_lightly_damped_rig_is_safe_between_the_corners_too(
    folder: TestFolder, change_rig: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    """A sharp resonance anywhere within a wide uncertainty stays clear of the stops."""
    change_rig("damping_ratio = 0.12 ", "damping_ratio = 0.02 ")
    change_rig("natural_frequency_uncertainty = 0.05", "natural_frequency_uncertainty = 0.1")
    designed(folder, capsys, "--duration", "25")
    profile = read_profile(folder.profile_h5)
    swings = [
        simulated_swing(profile, gain=12 * 1.05, natural_frequency=frequency, damping_ratio=0.016)
        for frequency in np.linspace(2.7, 3.3, 61)
    ]
    assert max(swings) < 30.0


@pytest.mark.usefixtures("figure")
def test_design_is_written_as_told(folder: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """The four files appear, the JSON file holds what was printed, and the rig sheet's sha256 stands in it."""
    told = designed(folder, capsys, "--band", "0.5", "10", "--duration", "25", "--seed", "3")
    assert sorted(os.listdir(folder.path)) == sorted([*FILES, "figures", "rig.toml"])
    assert os.listdir(folder.figures) == ["profile_card.svg"] and told["figure"] == "figures/profile_card.svg"
    written = folder.read_json(folder.profile_json, format="freqid profile")
    assert written["prediction"] == told["prediction"]
    assert list(written["sources"]) == ["rig.toml"]
    profile = read_profile(folder.profile_h5)
    assert (profile.duration, profile.band, profile.seed) == (25.0, (0.5, 10.0), 3)
    assert told["band"] == [0.5, 10.0] and told["duration"] == 25.0
    assert profile.n_periods == told["n_periods"] >= 2


def test_same_seed_same_voltage(planned: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """A seed repeats the design to the last bit, another gives another, and a new design replaces the profile."""
    voltages = [planned.profile_csv.read_bytes()]  # the default seed
    for seed in ("1", "2"):
        designed(planned, capsys, *SHORT, "--seed", seed)
        voltages.append(planned.profile_csv.read_bytes())
    assert voltages[0] == voltages[1] != voltages[2]


def test_step_profile_stands_beside_the_other(planned: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """--kind step writes step_profile.* and leaves profile.* alone."""
    before = planned.profile_h5.read_bytes()
    told = designed(planned, capsys, "--kind", "step")
    assert told["files"] == [f"step_profile.{suffix}" for suffix in ("h5", "csv", "wav", "json")]
    assert told["kind"] == "step" and told["band"] is None
    assert planned.profile_h5.read_bytes() == before


def test_table_is_for_people_and_cautions_are_on_stderr(
    folder: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """Stdout holds the table with values and uncertainties, stderr the cautions and no bar."""
    assert main(["excite", str(folder.path), *SHORT]) == 0
    out, err = capsys.readouterr()
    for words in ("worst swing", "27 deg of 27 deg allowed, stops at ±30 deg", "limited by the swing",
                  "natural frequency", "profile.h5, profile.csv, profile.wav, profile.json"):  # fmt: skip
        assert words in out
    assert out.count("±") >= 6
    for words in ("limits of its maker come first", "no safety certificate", "sign", "clear of the sweep",
                  "hard-wired stop", "competent person"):  # fmt: skip
        assert words in err
    assert "\x1b" not in out + err


def test_wanted_damping_lengthens_the_test(folder: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """The test grows until the damping ratio is as certain as wanted, at 95 %, and no further than it must."""
    usual = designed(folder, capsys, "--kind", "swept-sine")
    reached = relative(usual)
    wanted = 0.8 * reached
    told = designed(folder, capsys, "--kind", "swept-sine", "--wanted-damping", f"{wanted:.6g}")
    assert relative(told) <= wanted * (1 + 1e-5)  # the option was printed to 6 digits
    # Information grows with the duration: 1/0.8^2 = 1.56 of the usual one, and not twice that.
    assert 1.2 < told["duration"] / usual["duration"] < 3.2
    easy = designed(folder, capsys, "--kind", "swept-sine", "--wanted-damping", "0.5")
    assert easy["duration"] == usual["duration"]


def relative(told: dict[str, Any]) -> float:
    """95 % half-width of the damping ratio over its value."""
    damping = told["prediction"]["expected"]["damping_ratio"]
    low, high = damping["interval_95"]
    return float((high - low) / 2 / damping["value"])


def test_damping_out_of_reach_is_told_with_what_it_would_take(
    folder: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """What cannot be reached in the duration allowed is refused with the figures, and nothing is written."""
    assert main(["excite", str(folder.path), *SHORT, "--wanted-damping", "0.00001"]) == 1
    err = capsys.readouterr().err
    assert "1e-05 relative (95 %) would take some" in err and "12 s is the most" in err and err.count("\n") == 1
    assert os.listdir(folder.path) == ["rig.toml"]


def test_without_a_step_test_the_amplitude_is_cautious(
    folder: TestFolder, change_rig: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    """Where no swing can be predicted the amplitude is a tenth of the voltage limit, which is said."""
    change_rig("gain = 12.0 ", "#")
    told = designed(folder, capsys, *SHORT)
    assert told["prediction"]["swing"] is None
    # Samples are rounded toward the bias by less than one count of 10 V / 2^31 = 4.7e-9 V; where that would steepen
    # the steepest change (some 0.05 V from sample to sample) all is smaller by two counts in that change: 1e-7 V.
    assert told["peak_voltage"] == pytest.approx(0.5, abs=1.1e-7)
    assert told["prediction"]["expected"] == dict.fromkeys(["gain", "natural_frequency", "damping_ratio", "delay"])
    assert [warning["code"] for warning in told["prediction"]["warnings"]] == ["swing_not_predicted"]
    assert main(["excite", str(folder.path), *SHORT]) == 0
    out, err = capsys.readouterr()
    assert "undetermined" in out and "not predicted" in out and "limited by the unknown swing" in out
    assert "note: the swing is not predicted: [step_test] lacks" in err


@pytest.mark.parametrize(
    ("changes", "words", "expected"),
    [
        ([("natural_frequency = 3.0 ", "#")], [], "band: [step_test] has no natural_frequency"),
        ([("natural_frequency = 3.0 ", "#")], ["--wanted-damping", "0.1", "--band", "1", "9"], "cannot be planned for"),
        ([("noise = 0.3", "noise = 0")], ["--wanted-damping", "0.1"], "a noise above 0 in [angle_sensor]"),
        ([("sample_rate = 250.0", "sample_rate = 250.5")], ["--duration", "25"], "250.5 Hz; a WAV file needs a whole"),
        ([], ["--band", "5", "2"], "band: 5 to 2 Hz"),
        ([("damping_ratio = 0.12 ", "damping_ratio = 0.0005 ")], [], "lower [step_test] natural_frequency_uncertainty"),
        ([], ["--band", "5", "200"], "200 Hz is not below 125 Hz"),
        ([], ["--duration", "2"], "duration: 2 s"),
        ([("voltage = 5.0", "voltage = -5.0")], [], "rig.toml: [limits] voltage = -5.0: must be a number above 0"),
        ([("slew_rate", "slewrate")], [], "[limits] unknown key 'slewrate'; did you mean 'slew_rate'?"),
    ],
)  # fmt: skip
def test_what_cannot_be_designed_is_told_in_one_line(
    changes: list[tuple[str, str]], words: list[str], expected: str, folder: TestFolder, change_rig: Any,
    capsys: pytest.CaptureFixture[str],
) -> None:  # fmt: skip
    """A faulty sheet or settings that do not go together are status 1, one line, and nothing is written."""
    for old, new in changes:
        change_rig(old, new)
    assert main(["excite", str(folder.path), *words]) == 1
    out, err = capsys.readouterr()
    assert out == "" and err.count("\n") == 1 and expected in err
    assert os.listdir(folder.path) == ["rig.toml"]


@pytest.mark.parametrize(("kind", "option", "value"), [("step", "--grid", "full"), ("multisine", "--course", "linear")])
def test_option_without_meaning_is_wrong_usage(kind: str, option: str, value: str, folder: TestFolder,
                                               capsys: pytest.CaptureFixture[str]) -> None:  # fmt: skip
    """A grid for steps and a course for lines are refused, not ignored."""
    assert main(["excite", str(folder.path), "--kind", kind, option, value]) == 2
    assert f"{option} has no meaning for --kind {kind}" in capsys.readouterr().err


def test_grid_leaves_lines_to_show_distortion(folder: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """By default even and odd multiples of 1/period stay free, are told and written; a full grid leaves none."""
    told = designed(folder, capsys, *SHORT)
    assert min(told["n_detection_lines"].values()) > 0
    written = folder.read_json(folder.profile_json, format="freqid profile")
    assert {name: len(lines) for name, lines in written["detection_lines"].items()} == told["n_detection_lines"]
    full = designed(folder, capsys, *SHORT, "--grid", "full")
    assert full["n_detection_lines"] == {"even": 0, "odd": 0}


def test_sweep_takes_its_time_or_says_what_haste_costs(
    folder: TestFolder, change_rig: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    """A lightly damped resonance makes the usual sweep longer; a duration asked for is kept, with what it does."""
    change_rig("damping_ratio = 0.12 ", "damping_ratio = 0.04 ")
    told = designed(folder, capsys, "--kind", "swept-sine", "--band", "1", "8", "--course", "linear")
    # damping 0.032, fr = 2.85 Hz, B = 0.1824 Hz: 7 Hz at 0.9 B^2 Hz/s take 233.8 s, over 0.83
    assert told["duration"] == pytest.approx(282, abs=2) and told["prediction"]["warnings"] == []
    hasty = designed(folder, capsys, "--kind", "swept-sine", "--band", "1", "8", "--duration", "60")
    (caveat,) = hasty["prediction"]["warnings"]
    assert caveat["code"] == "fast_sweep" and "half-power widths late" in caveat["message"]


def test_band_for_a_step_is_wrong_usage(folder: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """A step test has no band."""
    assert main(["excite", str(folder.path), "--kind", "step", "--band", "1", "5"]) == 2
    assert "--band has no meaning for --kind step" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("band", "code"), [(("0.5", "40"), "band_above_sensor"), (("5", "20"), "resonance_outside_band")]
)
def test_doubtful_band_is_a_caveat(
    band: tuple[str, str], code: str, folder: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """A band beyond the sensor, or beside the resonance, is designed, and the doubt is told."""
    told = designed(folder, capsys, "--band", *band, "--duration", "60", "--kind", "swept-sine")
    assert [warning["code"] for warning in told["prediction"]["warnings"]] == [code]


def test_failed_writing_leaves_nothing(
    folder: TestFolder, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """On a full disk no profile and no temporary file is left."""

    def refuse(*_: object) -> None:
        raise OSError(28, "No space left on device", "profile.h5")

    monkeypatch.setattr(os, "replace", refuse)
    assert main(["excite", str(folder.path), *SHORT]) == 1
    assert "profile.h5: No space left on device" in capsys.readouterr().err
    assert os.listdir(folder.path) == ["rig.toml"]


def test_unknown_rig_gets_a_scouting_test(
    folder: TestFolder, change_rig: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    """Without any step-test value a gentle test over all the sensor sees is proposed, and what to do after it."""
    for key in ("gain = 12.0 ", "natural_frequency = 3.0 ", "damping_ratio = 0.12 ", "delay = 0.02 "):
        change_rig(key, "#")
    told = designed(folder, capsys)
    assert told["band"] == [0.2, 27.0]  # 12 periods in 60 s; 0.45 of 60 frames/s
    assert told["peak_voltage"] == pytest.approx(0.5, abs=1.1e-7)  # a tenth of 5 V, rounded toward the bias
    (caveat,) = told["prediction"]["warnings"]
    assert caveat["code"] == "scouting_test" and told["prediction"]["swing"] is None
    assert "no swing can be predicted" in caveat["message"] and "--from-model" in caveat["message"]


def write_model(folder: TestFolder, *, adequate: bool) -> None:
    """A model of 12 deg/V, 4 Hz, 0.2, each known to 1 % or better, its delay with the clocks' offset in it."""
    parameters = {
        "gain": {"value": 12.0, "unit": "deg/V", "interval_95": [11.88, 12.12]},
        "natural_frequency": {"value": 4.0, "unit": "Hz", "interval_95": [3.98, 4.02]},
        "damping_ratio": {"value": 0.2, "unit": "1", "interval_95": [0.198, 0.202]},
        "delay": {"value": 0.37, "unit": "s", "interval_95": [0.36, 0.38], "includes_clock_offset": True},
    }
    folder.results.mkdir(exist_ok=True)
    folder.write_json(folder.model, {
        "format": "freqid model", "format_version": 1, "angle_unit": "deg", "parameters": parameters,
        "adequate": adequate,
    })  # fmt: skip


def test_next_test_is_planned_from_the_model(
    planned: TestFolder, change_rig: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    """--from-model swings the estimated rig, not the step test's, and can be captured."""
    change_rig("gain = 12.0 ", "gain = 10.0 ")
    write_model(planned, adequate=True)
    told = designed(planned, capsys, "--from-model", *SHORT)
    expected = told["prediction"]["expected"]
    assert [expected[name]["value"] for name in expected] == [12.0, 4.0, 0.2, 0.02]  # the delay is the sheet's
    profile = read_profile(planned.profile_h5)
    # the tolerances of the sheet, 5, 2 and 10 %, are wider than the intervals and make the box
    swing = max(
        simulated_swing(profile, gain=12.6, natural_frequency=4.0 * part, damping_ratio=0.2 * other)
        for part in np.linspace(0.98, 1.02, 9)
        for other in (0.9, 1.1)
    )
    # Of 27 deg allowed; a peak at up to 8 Hz is missed at 250 Hz by 1 - cos(pi * 8 / 250) = 0.5 %, and the worst
    # natural frequency lies within 0.25 % of one tried, a fortieth of the half-power width.
    assert 27.0 * (1 - 0.02) < swing < 27.0 * 1.001
    written = planned.read_json(planned.profile_json, format="freqid profile")
    assert sorted(written["sources"]) == ["results/model.json", "rig.toml"]
    assert main(["capture", str(planned.path), "--simulate"]) == 0


def test_later_more_cautious_step_test_stops_the_capture(
    planned: TestFolder, change_rig: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    """A profile planned from the model is held against [step_test], too, once that has been changed."""
    write_model(planned, adequate=True)
    designed(planned, capsys, "--from-model", *SHORT)
    assert main(["capture", str(planned.path), "--simulate"]) == 0
    change_rig("gain_uncertainty = 0.05", "gain_uncertainty = 0.9")
    change_rig("natural_frequency = 3.0 ", "natural_frequency = 4.0 ")
    capsys.readouterr()
    assert main(["capture", str(planned.path), "--simulate"]) == 1
    err = capsys.readouterr().err
    assert "swing: " in err and "27 allowed" in err and err.count("\n") == 1


@pytest.mark.parametrize(("adequate", "box"), [(True, (0.05, 0.02, 0.1)), (False, (0.05, 0.05, 0.2))])
def test_plan_does_not_trust_a_model_beyond_the_rig(
    adequate: bool, box: tuple[float, ...], planned: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """One quiet run does not say how the rig changes: the sheet's tolerances, or for an inadequate model the wider
    uncertainties of its step test, are the least that a plan allows for."""
    write_model(planned, adequate=adequate)
    designed(planned, capsys, "--from-model", *SHORT)
    prior = read_profile(planned.profile_h5).settings["prior"]
    names = ("gain", "natural_frequency", "damping_ratio")
    assert tuple(prior[f"{name}_uncertainty"] for name in names) == pytest.approx(box)


@pytest.mark.parametrize(
    ("damping_ratio", "expected"),
    [
        (None, "damping_ratio is undetermined"),
        ({"value": 0.1, "interval_95": [-0.05, 0.25]}, "damping_ratio is known to 1.5 relative (95 %) only"),
        ({"value": 0.1}, "damaged (KeyError('interval_95'))"),
    ],
)
def test_model_that_cannot_be_planned_from_is_told(
    damping_ratio: object, expected: str, folder: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """No model, or one that leaves a parameter open, is one line with what to do, and nothing is written."""
    assert main(["excite", str(folder.path), "--from-model"]) == 1
    err = capsys.readouterr().err
    assert "model.json: no such file; make it with `freqid estimate" in err and err.count("\n") == 1
    folder.results.mkdir()
    known = {"value": 3.0, "interval_95": [2.9, 3.1]}
    parameters = {"gain": known, "natural_frequency": known, "damping_ratio": damping_ratio, "delay": None}
    content = {"format": "freqid model", "format_version": 1, "angle_unit": "deg", "parameters": parameters}
    folder.write_json(folder.model, content)
    assert main(["excite", str(folder.path), "--from-model"]) == 1
    err = capsys.readouterr().err
    assert expected in err and err.count("\n") == 1
    assert sorted(os.listdir(folder.path)) == ["results", "rig.toml"]
