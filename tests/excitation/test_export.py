"""Do all files of a profile hold the same samples, inside the limits, and come back whole?"""

from __future__ import annotations

import json
import math
import os
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.io import wavfile
from spring_vane import Vane

from excitation import (
    ExcitationError,
    LimitExceeded,
    Limits,
    MultisineSettings,
    Profile,
    StepSettings,
    SweptSineSettings,
    design_multisine,
    design_step_sequence,
    design_swept_sine,
    read_profile,
    write_profile,
)
from excitation.hdf5_file import file_sha256, read_hdf5


def _design(kind: str, limits: Limits, rig: Vane) -> Profile:
    if kind == "step":
        return design_step_sequence(StepSettings(sample_rate=100.0, limits=limits, rigs=[rig]))
    band, duration, rate = (0.5, 8.0), 20.0, 100.0
    if kind == "swept-sine":
        return design_swept_sine(
            SweptSineSettings(band=band, duration=duration, sample_rate=rate, limits=limits, rigs=[rig])
        )
    return design_multisine(
        MultisineSettings(
            band=band, duration=duration, sample_rate=rate, limits=limits, rigs=[rig], phases="schroeder", seed=7
        )
    )


def _assert_same(profile: Profile, other: Profile) -> None:
    for name in Profile.__dataclass_fields__:
        ours, theirs = getattr(profile, name), getattr(other, name)
        if isinstance(ours, np.ndarray):
            np.testing.assert_array_equal(ours, theirs, err_msg=name)
        else:
            assert ours == theirs, name


@pytest.mark.parametrize("bias", [0.0, 1.3, -2.7])
@pytest.mark.parametrize("kind", ["multisine", "swept-sine", "step"])
def test_three_files_hold_the_same_profile(tmp_path: Path, limits: Limits, vane: Vane, kind: str, bias: float) -> None:
    """HDF5, CSV and WAV read back equal to the last bit, in a folder with spaces and umlauts."""
    folder = tmp_path / "Prüfstand Fahne 1"
    folder.mkdir()
    files = write_profile(_design(kind, replace(limits, bias=bias), vane), folder, full_scale=10.0)
    for path in (files.hdf5, files.csv, files.wav):
        _assert_same(files.profile, read_profile(path))
    assert sorted(os.listdir(folder)) == ["profile.csv", "profile.h5", "profile.json", "profile.wav"]


@pytest.mark.parametrize("bias", [0.0, 1.3, -2.7])
@pytest.mark.parametrize("kind", ["multisine", "swept-sine", "step"])
def test_rounding_never_passes_a_limit(tmp_path: Path, limits: Limits, vane: Vane, kind: str, bias: float) -> None:
    """Rounded toward the bias: no sample farther out, no change steeper, none moved by more than 3 counts."""
    limits = replace(limits, bias=bias, slew_rate=80.0)
    profile = _design(kind, limits, vane)
    rounded = write_profile(profile, tmp_path, full_scale=10.0).profile
    limits.check_profile(rounded)
    assert np.all(np.abs(rounded.voltage - bias) <= np.abs(profile.voltage - bias))
    assert rounded.max_slew_rate <= profile.max_slew_rate
    assert rounded.voltage[0] == rounded.voltage[-1] == bias
    # at most 1 count of rounding, and where the steepest change must not grow all is made smaller by 2 counts in it:
    # a departure of n times the steepest change moves by 2 n counts
    steeps = profile.peak_voltage / np.max(np.abs(profile.changes))
    assert np.max(np.abs(rounded.voltage - profile.voltage)) < (2 + 2 * steeps) * 10.0 / 2**31


def test_slow_ramp_at_the_slew_limit_stays_inside_it(tmp_path: Path) -> None:
    """A ramp of some 20 counts a sample, where one count is 5 % of the slew rate, is not made steeper."""
    step = 20.3 * 10.0 / 2**31
    ramp = step * np.concatenate([np.arange(500), np.arange(500)[::-1]])
    profile = Profile(voltage=ramp, sample_rate=1000.0, hold="zero-order", bias=0.0, kind="other")
    rounded = write_profile(profile, tmp_path, full_scale=10.0).profile
    assert rounded.max_slew_rate <= profile.max_slew_rate
    assert rounded.peak_voltage > 0.88 * profile.peak_voltage  # 2 of 20.3 counts smaller, and 1 of rounding


def test_periods_stay_identical_after_rounding(tmp_path: Path, limits: Limits, vane: Vane) -> None:
    """The steady part repeats to the last bit in the files too."""
    rounded = write_profile(_design("multisine", limits, vane), tmp_path, full_scale=10.0).profile
    steady = rounded.voltage[rounded.steady_start : rounded.steady_stop].reshape(rounded.n_periods, -1)
    assert np.array_equal(steady, np.broadcast_to(steady[0], steady.shape))


def test_writing_what_was_read_changes_nothing(tmp_path: Path, limits: Limits, vane: Vane) -> None:
    """Rounding what is already rounded leaves every sample, with a bias too."""
    for bias in (0.0, 1.3):
        files = write_profile(_design("multisine", replace(limits, bias=bias), vane), tmp_path, full_scale=10.0)
        again = write_profile(read_profile(files.csv), tmp_path, full_scale=10.0, name="again")
        np.testing.assert_array_equal(again.profile.voltage, files.profile.voltage)


def test_csv_is_as_promised(tmp_path: Path, limits: Limits, vane: Vane) -> None:
    """The header is exact, every line is time and voltage to the last digit, and lines end alike everywhere."""
    files = write_profile(_design("multisine", limits, vane), tmp_path, full_scale=10.0, name="step profile")
    assert files.csv.name == "step profile.csv"
    content = files.csv.read_bytes()
    assert content.startswith(b"time_s,voltage_V\n0.0,0.0\n")
    assert b"\r" not in content
    rows = [line.split(",") for line in content.decode("ascii").splitlines()[1:]]
    assert [float(time) for time, _ in rows] == files.profile.time.tolist()
    assert [float(voltage) for _, voltage in rows] == files.profile.voltage.tolist()


def test_wav_counts_are_volts_of_full_scale(tmp_path: Path, limits: Limits, vane: Vane) -> None:
    """A player that knows only the full scale puts out the profile: 32-bit counts over 2^31 times full scale."""
    for bias, relative in ((0.0, 0.0), (1.3, 2e-9)):  # with 1.3 V of 10 V half a count is 1.8e-9 of the bias
        files = write_profile(_design("multisine", replace(limits, bias=bias), vane), tmp_path, full_scale=10.0)
        rate, counts = wavfile.read(files.wav)
        assert rate == 100
        assert counts.dtype == np.int32
        np.testing.assert_allclose(counts / 2**31 * 10.0, files.profile.voltage, rtol=relative, atol=0)


def test_full_scale_itself_fits(tmp_path: Path) -> None:
    """Plus full scale is one count beyond the largest number of a WAV file; it is met but for that count."""
    profile = Profile(voltage=[0.0, 10.0, -10.0, 0.0], sample_rate=8.0, hold="zero-order", bias=0.0, kind="other")
    voltage = write_profile(profile, tmp_path, full_scale=10.0).profile.voltage
    assert voltage.tolist() == [0.0, 10.0 * (1 - 2.0**-31), -10.0, 0.0]


def test_json_says_what_was_designed_and_predicted(tmp_path: Path, limits: Limits, vane: Vane) -> None:
    """Prediction, design, sources and hashes stand in the JSON file, the stamp in the HDF5 file."""
    files = write_profile(
        _design("multisine", limits, vane),
        tmp_path,
        full_scale=10.0,
        prediction={"swing": 27.0, "uncertainty": {"gain": np.float64(0.1)}, "corners": (1, 2)},
        sources={"rig.toml": "ab" * 32},
    )
    content = json.loads(files.json.read_text(encoding="utf-8"))
    assert content["format"] == "freqid profile"
    assert content["prediction"] == {"swing": 27.0, "uncertainty": {"gain": 0.1}, "corners": [1, 2]}
    assert content["sources"] == {"rig.toml": "ab" * 32}
    assert content["files"] == {path.name: file_sha256(path) for path in (files.hdf5, files.csv, files.wav)}
    assert content["lines"] == files.profile.lines.tolist()
    assert content["warnings"] == []
    stored = read_hdf5(files.hdf5)
    names = ("lines", "even_detection_lines", "odd_detection_lines")
    assert stored.units == {"voltage": "V", **dict.fromkeys(names, "Hz")}
    for parity, lines in zip(("even", "odd"), files.profile.detection_lines, strict=True):
        assert content["detection_lines"][parity] == lines.tolist()
        assert np.array_equal(stored.datasets[f"{parity}_detection_lines"], lines)
    assert {"format", "format_version", "freqid_version", "created", "sources"} <= stored.attributes.keys()


def test_no_infinity_reaches_json(tmp_path: Path) -> None:
    """NaN and infinity become null, each with a warning that names the place; the text holds neither word."""
    profile = Profile(voltage=[0.0, 0.0], sample_rate=8.0, hold="smooth", bias=0.0, kind="other")  # no crest factor
    files = write_profile(profile, tmp_path, full_scale=1.0, prediction={"a": [1.0, math.inf], "b": {"c": math.nan}})
    content = json.loads(files.json.read_text(encoding="utf-8"), parse_constant=lambda word: pytest.fail(word))
    assert content["prediction"] == {"a": [1.0, None], "b": {"c": None}}
    assert content["crest_factor"] is None
    places = [warning["message"].split(" ")[0] for warning in content["warnings"]]
    assert places == ["crest_factor", "prediction.a[1]", "prediction.b.c"]


def test_bare_files_give_a_bare_profile(tmp_path: Path, limits: Limits, vane: Vane) -> None:
    """Without the JSON file CSV still tells samples and rate, WAV too once the full scale is given."""
    files = write_profile(_design("multisine", replace(limits, bias=1.3), vane), tmp_path, full_scale=10.0)
    files.json.unlink()
    bare = read_profile(files.csv)
    np.testing.assert_array_equal(bare.voltage, files.profile.voltage)
    assert (bare.sample_rate, bare.kind, bare.bias, bare.period_samples) == (100.0, "other", 1.3, None)
    with pytest.raises(ExcitationError, match="give full_scale"):
        read_profile(files.wav)
    sound = read_profile(files.wav, full_scale=10.0)
    np.testing.assert_allclose(sound.voltage, files.profile.voltage, rtol=2e-9, atol=0)
    _assert_same(files.profile, read_profile(files.hdf5))


def test_failure_leaves_earlier_files_alone(tmp_path: Path, limits: Limits, vane: Vane) -> None:
    """What cannot be written as JSON leaves the four earlier files as they were and nothing beside them."""
    profile = _design("step", limits, vane)
    files = write_profile(profile, tmp_path, full_scale=10.0)
    before = {path.name: file_sha256(path) for path in tmp_path.iterdir()}
    with pytest.raises(TypeError):
        write_profile(profile, tmp_path, full_scale=10.0, prediction={"bad": object()})
    assert {path.name: file_sha256(path) for path in tmp_path.iterdir()} == before
    assert files.json.name in before


@pytest.mark.parametrize(
    ("changes", "options", "message"),
    [
        ({"sample_rate": 99.5}, {}, "choose 100 Hz"),
        ({}, {"full_scale": 0.5}, "reaches 1 V, the output 0.5 V"),
        ({}, {"full_scale": 0.0}, "full_scale: 0.0 V"),
        ({}, {"full_scale": math.nan}, "full_scale: nan V"),
        ({"bias": 1e-9}, {}, "too small for a full scale of 10 V"),
    ],
)
def test_what_cannot_be_written_is_refused(
    tmp_path: Path, changes: dict[str, Any], options: dict[str, Any], message: str
) -> None:
    """Rate, full scale and bias that the files cannot hold are told with what to do, and nothing is written."""
    fields = {"voltage": [0.0, 1.0, 0.0], "sample_rate": 8.0, "hold": "smooth", "bias": 0.0, "kind": "other"}
    with pytest.raises(ExcitationError, match=message):
        write_profile(Profile(**{**fields, **changes}), tmp_path, **{"full_scale": 10.0, **options})
    assert list(tmp_path.iterdir()) == []


def test_full_scale_too_small_is_a_limit(tmp_path: Path) -> None:
    """A profile beyond the full scale is refused as a limit, and a missing folder as an OSError."""
    profile = Profile(voltage=[0.0, 1.0, 0.0], sample_rate=8.0, hold="smooth", bias=0.0, kind="other")
    with pytest.raises(LimitExceeded):
        write_profile(profile, tmp_path, full_scale=0.9)
    with pytest.raises(OSError, match="does not exist"):
        write_profile(profile, tmp_path / "none", full_scale=1.0)


@pytest.mark.parametrize(
    ("name", "content", "message"),
    [
        ("profile.txt", b"", r"none of \.h5, \.csv, \.wav"),
        ("profile.csv", b"t,v\n0,0\n1,0\n", "line 1 is 't,v'"),
        ("profile.csv", b"time_s,voltage_V\n0,0\n1,x\n", "not a table"),
        ("profile.csv", b"time_s,voltage_V\n0,0\n", "2 or more"),
        ("profile.csv", b"time_s,voltage_V\n0,0\n1,0\n5,0\n", "not evenly spaced"),
        ("profile.csv", b"time_s,voltage_V\n0,0\n1,nan\n", "sample 1 is nan"),
        ("profile.csv", b"\xff\xfe\x00", "not a table"),
        ("profile.wav", b"RIFF", "not a readable WAV file"),
        ("profile.wav", b"", "not a readable WAV file"),
        ("profile.wav", b"time_s", "not a readable WAV file"),
        ("profile.h5", b"text", "not a readable HDF5 file"),
    ],
)
def test_damaged_files_are_told_in_one_line(tmp_path: Path, name: str, content: bytes, message: str) -> None:
    """Each damage is told with the file's name, in one line."""
    (tmp_path / name).write_bytes(content)
    with pytest.raises(ExcitationError, match=message) as caught:
        read_profile(tmp_path / name)
    assert "\n" not in str(caught.value)


def test_cut_files_and_wrong_companions_are_refused(tmp_path: Path, limits: Limits, vane: Vane) -> None:
    """A WAV or CSV file cut short and a damaged or foreign JSON file beside are each told."""
    files = write_profile(_design("step", limits, vane), tmp_path, full_scale=10.0)
    files.wav.write_bytes(files.wav.read_bytes()[:1000])
    with pytest.raises(ExcitationError, match="not a readable WAV file"):
        read_profile(files.wav)
    files.csv.write_bytes(b"".join(files.csv.read_bytes().splitlines(keepends=True)[:50]))
    with pytest.raises(ExcitationError, match=r"49 samples, .* were designed"):
        read_profile(files.csv)
    damages = {"{": "damaged at line 1", "[]": "does not describe", '{"format": "x"}': "format is 'x'"}
    for text, message in damages.items():
        files.json.write_text(text, encoding="utf-8")
        with pytest.raises(ExcitationError, match=message):
            read_profile(files.csv)
    files.json.write_text('{"format": "freqid profile", "format_version": 9}', encoding="utf-8")
    with pytest.raises(ExcitationError, match="version 9"):
        read_profile(files.csv)
    files.json.write_text('{"format": "freqid profile", "format_version": 1}', encoding="utf-8")
    with pytest.raises(ExcitationError, match="does not say"):
        read_profile(files.csv)
    with pytest.raises(FileNotFoundError, match="no such file"):
        read_profile(tmp_path / "other.h5")
