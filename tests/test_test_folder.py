"""The test folder: its names, its JSON files, and that nothing half-written stays."""

from __future__ import annotations

import hashlib
import json
import math
import os
import re
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest

import freqid
from freqid.errors import TestFolderError
from freqid.test_folder import TestFolder, make_read_only, replacing, write_text


@pytest.fixture
def folder(tmp_path: Path) -> TestFolder:
    path = tmp_path / "a test folder é"
    path.mkdir()
    return TestFolder.existing(path)


def test_names_are_those_of_the_contract(folder: TestFolder) -> None:
    """Every file stands where the design says."""
    named = [
        folder.rig, folder.profile_h5, folder.profile_csv, folder.profile_wav, folder.profile_json,
        folder.profile("step"), folder.profile("step", ".json"), folder.run("response-001"), folder.response_h5,
        folder.response_csv, folder.model, folder.step, folder.crosscheck, folder.report, folder.figures,
    ]  # fmt: skip
    assert [path.relative_to(folder.path).as_posix() for path in named] == [
        "rig.toml", "profile.h5", "profile.csv", "profile.wav", "profile.json",
        "step_profile.h5", "step_profile.json", "runs/response-001.h5", "results/response.h5",
        "results/response.csv", "results/model.json", "results/step.json", "results/crosscheck.json", "report.html",
        "figures",
    ]  # fmt: skip


def test_missing_folder_is_told_with_the_remedy(tmp_path: Path) -> None:
    """A folder that is not there, or is a file, is refused in one line that can be acted on."""
    with pytest.raises(TestFolderError, match=r"no such test folder; make one with `freqid new \"?.*no where\"`"):
        TestFolder.existing(tmp_path / "no where")
    (tmp_path / "file").write_text("x", encoding="utf-8")
    with pytest.raises(TestFolderError, match="a file, not a test folder"):
        TestFolder.existing(tmp_path / "file")


def test_runs_are_numbered_by_kind(folder: TestFolder) -> None:
    """Numbers go on after the highest of the same kind, in numerical order past 999, and strangers are ignored."""
    assert folder.run_names("response") == ()
    assert folder.next_run_name("step") == "step-001"
    folder.runs.mkdir()
    for name in ("response-002", "response-1000", "response-999", "step-007", "response-abc", "response-01"):
        (folder.runs / f"{name}.h5").touch()
    assert folder.run_names("response") == ("response-002", "response-999", "response-1000")
    assert folder.next_run_name("response") == "response-1001"
    assert folder.latest_run_name("step") == "step-007"


def test_no_run_is_told_with_the_remedy(folder: TestFolder) -> None:
    """Without a run of the kind asked for, the commands that make one are named."""
    with pytest.raises(TestFolderError, match=r"holds no step run; record one with `freqid capture .* --kind step`"):
        folder.latest_run_name("step")


def test_json_comes_back_as_written(folder: TestFolder) -> None:
    """Numbers keep every bit, text its accents, numpy scalars and arrays become numbers and lists."""
    content = {"format": "freqid model", "format_version": 1, "name": "Prüfling é", "none": None,
               "tenth": 0.1, "array": np.array([1.0, 2.5]), "count": np.int64(3), "yes": np.bool_(True)}  # fmt: skip
    folder.write_json(folder.model, content)
    raw = folder.model.read_bytes()
    assert raw.endswith(b"}\n") and b"\r" not in raw and "Prüfling é".encode() in raw
    back = folder.read_json(folder.model, format="freqid model")
    assert back == {**content, "array": [1.0, 2.5], "count": 3, "yes": True}


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf, np.float64("nan"), np.array([1.0, np.nan])])
def test_not_finite_never_reaches_a_file(folder: TestFolder, value: object) -> None:
    """NaN and infinity are refused by the name of their place, and the file of before stays as it was."""
    folder.write_json(folder.model, {"parameters": {"gain": 1.0}})
    before = folder.model.read_bytes()
    with pytest.raises(ValueError, match=r"^parameters\.gain(\[1\])? is -?(nan|inf)"):
        folder.write_json(folder.model, {"parameters": {"gain": value}})
    assert folder.model.read_bytes() == before
    assert os.listdir(folder.results) == ["model.json"]


@pytest.mark.parametrize(
    ("name", "command"),
    [
        ("results/model.json", "freqid estimate FOLDER"),
        ("results/response.h5", "freqid estimate FOLDER"),
        ("results/step.json", "freqid steptest FOLDER"),
        ("results/crosscheck.json", "freqid crosscheck FOLDER"),
        ("profile.json", "freqid excite FOLDER"),
        ("step_profile.json", "freqid excite FOLDER --kind step"),
        ("report.html", "freqid report FOLDER"),
        ("rig.toml", "freqid new FOLDER"),
    ],
)
def test_missing_file_names_the_command_that_makes_it(folder: TestFolder, name: str, command: str) -> None:
    """A file that no stage has written yet is told with the verb to run."""
    with pytest.raises(TestFolderError) as caught:
        folder.read_json(folder.path / name)
    assert str(caught.value).endswith(f"no such file; make it with `{command.replace('FOLDER', folder.quoted)}`")
    assert folder.quoted == f'"{folder.path}"'


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("", r"damaged \(Expecting value: line 1"),
        ('{"format": "freqid model", ', r"damaged \(.*line 1 column"),
        ("[1, 2]", r"damaged \(not a JSON object\)"),
        ('{"gain": NaN}', r"damaged \(holds NaN\)"),
        ('{"format": "freqid step", "format_version": 1}', r"its format is 'freqid step', expected 'freqid model'"),
        ('{"gain": 1}', r"its format is None"),
        ('{"format": "freqid model", "format_version": 2, "freqid_version": "9.0"}',
         r"freqid model version 2, written by freqid 9\.0; this is freqid .*reads up to version 1"),
        ('{"format": "freqid model"}', r"freqid model version None"),
    ],
)  # fmt: skip
def test_damaged_or_foreign_json_is_told_in_one_line(folder: TestFolder, text: str, expected: str) -> None:
    """What cannot be read, is of another format or newer is refused with the file name and what to do."""
    write_text(folder.model, text)
    with pytest.raises(TestFolderError) as caught:
        folder.read_json(folder.model, format="freqid model", version=1)
    assert re.search(expected, str(caught.value))
    assert str(caught.value).startswith(str(folder.model)) and "\n" not in str(caught.value)


def test_provenance_says_what_it_was_computed_from(folder: TestFolder, tmp_path: Path) -> None:
    """Format, versions, the time in UTC, and the sha256 of each file under its name within the folder."""
    write_text(folder.runs / "response-001.h5", "raw")
    write_text(tmp_path / "elsewhere.csv", "log")
    earliest = datetime.now(UTC).replace(microsecond=0)
    told = folder.provenance(
        format="freqid model", version=3, computed_from=[folder.run("response-001"), tmp_path / "elsewhere.csv"]
    )
    created = datetime.fromisoformat(told.pop("created"))
    assert created.utcoffset() is not None and earliest <= created <= datetime.now(UTC)
    assert told == {
        "format": "freqid model",
        "format_version": 3,
        "freqid_version": freqid.__version__,
        "computed_from": {
            "runs/response-001.h5": hashlib.sha256(b"raw").hexdigest(),
            "elsewhere.csv": hashlib.sha256(b"log").hexdigest(),
        },
    }
    assert json.dumps(told)


def test_a_failed_writing_leaves_nothing_behind(folder: TestFolder) -> None:
    """When the writing breaks off half way, the old file stays and no other is left."""
    write_text(folder.report, "old")
    with pytest.raises(OSError, match="disk full"), replacing(folder.report) as temporary:
        temporary.write_text("half", encoding="utf-8")
        assert temporary.parent == folder.report.parent
        raise OSError("disk full")
    assert folder.report.read_text(encoding="utf-8") == "old"
    assert os.listdir(folder.path) == ["report.html"]


def test_read_only_files_lose_their_write_permission(folder: TestFolder) -> None:
    """Every write bit is gone, for whoever runs the test."""
    write_text(folder.rig, "x")
    assert folder.rig.stat().st_mode & 0o200
    make_read_only(folder.rig)
    assert folder.rig.stat().st_mode & 0o222 == 0
