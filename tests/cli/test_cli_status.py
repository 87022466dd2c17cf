"""`freqid status`: what is there, what is out of date, what comes next."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from freqid.cli import main
from freqid.test_folder import TestFolder


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory, designed_once: TestFolder) -> TestFolder:
    """The whole job on a short record; tests that change it copy it first."""
    copy = tmp_path_factory.mktemp("finished") / "a test é"
    made = TestFolder(shutil.copytree(designed_once.path, copy))
    where = str(made.path)
    for words in (
        ["capture", where, "--simulate", "--seed", "1"],
        ["estimate", where], ["excite", where, "--kind", "step"],
        ["capture", where, "--kind", "step", "--simulate", "--seed", "2"], ["steptest", where],
    ):  # fmt: skip
        assert main(words) == 0
    assert main(["crosscheck", where]) in (0, 3, 4)
    assert main(["report", where]) == 0
    return made


@pytest.fixture
def copied(finished: TestFolder, tmp_path: Path) -> TestFolder:
    """A copy that a test may change."""
    return TestFolder(shutil.copytree(finished.path, tmp_path / "copy é"))


def told(folder: TestFolder, capsys: pytest.CaptureFixture[str]) -> dict[str, Any]:
    """What `freqid status --json` says."""
    capsys.readouterr()
    assert main(["status", str(folder.path), "--json"]) == 0
    content: dict[str, Any] = json.loads(capsys.readouterr().out)
    content["states"] = {part["name"]: part["state"] for part in content["parts"]}
    return content


def test_the_next_command_leads_through_the_whole_job(
    folder: TestFolder, capsys: pytest.CaptureFixture[str], finished: TestFolder
) -> None:
    """As each file appears, the next command is the one that makes the next."""
    stages = (
        ("excite", ["profile.h5", "profile.csv", "profile.wav", "profile.json"]),
        ("capture", ["runs/response-001.h5"]),
        ("estimate", ["results/response.h5", "results/response.csv", "results/model.json"]),
        ("excite --kind step", [f"step_profile.{ending}" for ending in ("h5", "csv", "wav", "json")]),
        ("capture --kind step", ["runs/step-001.h5"]),
        ("steptest", ["results/step.json"]),
        ("crosscheck", ["results/crosscheck.json"]),
        ("report", ["report.html"]),
    )
    for expected, files in stages:
        verb, *options = expected.split(" ")
        words = " ".join(["freqid", verb, folder.quoted, *options])
        assert told(folder, capsys)["next_command"] == words
        for name in files:
            (folder.path / name).parent.mkdir(exist_ok=True)
            shutil.copy(finished.path / name, folder.path / name)
    assert "missing" not in told(folder, capsys)["states"].values()


def test_nothing_is_out_of_date_after_the_whole_job(
    finished: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """Every part is there, and looking changes nothing on the disk."""
    before = {file: file.stat().st_mtime_ns for file in finished.path.rglob("*")}
    content = told(finished, capsys)
    assert set(content["states"].values()) == {"there"}
    assert content["verdict"] in ("agree", "disagree", "unresolved")
    assert before == {file: file.stat().st_mtime_ns for file in finished.path.rglob("*")}


def test_a_newer_run_puts_the_model_out_of_date(copied: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """A second run makes `estimate` the next command; the step test stays."""
    assert main(["capture", str(copied.path), "--simulate", "--seed", "5"]) == 0
    content = told(copied, capsys)
    assert content["states"]["model"] == "out of date" and content["states"]["step test"] == "there"
    assert content["next_command"] == f"freqid estimate {copied.quoted}"


def test_a_changed_rig_sheet_spares_what_was_measured(copied: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """Profiles, comparison and report depend on the sheet; model and step values do not."""
    with copied.rig.open("a", encoding="utf-8") as sheet:
        sheet.write("\n# the bench was moved\n")
    states = told(copied, capsys)["states"]
    stale = {name for name, state in states.items() if state == "out of date"}
    assert stale == {"profile", "step profile", "cross-check", "report"}


@pytest.mark.parametrize(
    ("name", "part"),
    [("results/model.json", "model"), ("results/crosscheck.json", "cross-check"), ("rig.toml", "rig sheet"),
     ("runs/step-001.h5", "step-001"), ("profile.json", "profile")],
)  # fmt: skip
def test_a_damaged_file_is_a_state(
    name: str, part: str, copied: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """What cannot be read is said to be damaged; status itself still succeeds."""
    path = copied.path / name
    path.chmod(0o644)
    path.write_bytes(b"{ [ no")
    assert told(copied, capsys)["states"][part] == "damaged"


def test_in_words_it_ends_with_the_next_command(
    folder: TestFolder, change_rig: Callable[[str, str], None], capsys: pytest.CaptureFixture[str]
) -> None:
    """The table names every part; a wrong rig sheet comes before everything else."""
    capsys.readouterr()
    assert main(["status", str(folder.path)]) == 0
    out = capsys.readouterr().out
    assert "rig sheet" in out and f"next: freqid excite {folder.quoted}" in out
    change_rig("[limits]", "[limitz]")
    assert main(["status", str(folder.path)]) == 0
    assert "next: nothing; mend the rig sheet first" in capsys.readouterr().out
