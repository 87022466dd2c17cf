"""freqid capture: a run is kept as it came, once, with the voltage it was driven with."""

from __future__ import annotations

import hashlib
import json
import os
from typing import Any

import numpy as np
import pytest

from excitation.profile_file import read_profile
from freqid.cli import main
from freqid.run_file import read_run
from freqid.test_folder import TestFolder


def test_simulated_run_holds_the_profile_and_says_where_it_is_from(
    planned: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """The voltage is the profile to the last bit, seed and sha256 are noted, and the file is read-only."""
    assert main(["capture", str(planned.path), "--simulate", "--seed", "7", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    run = read_run(planned.run("response-001"))
    profile = read_profile(planned.profile_h5)
    assert np.array_equal(run.input.voltage, profile.voltage)
    assert run.input.periodicity is not None
    assert run.input.periodicity.n_periods == profile.n_periods
    assert run.simulated and run.input.commanded and not run.common_clock
    assert run.notes[-1] == "simulated with seed 7"
    assert (run.origins[0].source, run.origins[0].sha256) == (
        "profile.h5", hashlib.sha256(planned.profile_h5.read_bytes()).hexdigest())  # fmt: skip
    assert told["run"] == "response-001" and told["file"] == "runs/response-001.h5"
    assert told["sha256"] == run.file_sha256
    assert told["angle"]["samples"] == run.angle.time.size
    assert planned.run("response-001").stat().st_mode & 0o222 == 0


def test_seed_repeats_a_run_and_no_seed_does_not(planned: TestFolder) -> None:
    """The same seed gives the same angle; without one each run is another, under the next number."""
    for words in (["--seed", "7"], ["--seed", "7"], [], []):
        assert main(["capture", str(planned.path), "--simulate", *words]) == 0
    names = planned.run_names("response")
    assert names == ("response-001", "response-002", "response-003", "response-004")
    angles = [read_run(planned.run(name)).angle.angle for name in names]
    assert np.array_equal(angles[0], angles[1])
    assert not np.array_equal(angles[2], angles[3])


def test_step_run_is_driven_with_the_step_profile(
    folder: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """--kind step plays step_profile.* and numbers its runs apart."""
    assert main(["excite", str(folder.path), "--kind", "step"]) == 0
    assert main(["capture", str(folder.path), "--kind", "step", "--simulate"]) == 0
    run = read_run(folder.run("step-001"))
    assert run.kind == "step" and run.origins[0].source == "step_profile.h5"
    assert "step-001, simulated" in capsys.readouterr().out


@pytest.mark.parametrize(("kind", "command"), [("response", "excite"), ("step", "excite --kind step")])
def test_missing_profile_is_told_with_the_remedy(
    kind: str, command: str, folder: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """Without a profile of the kind there is no run, and the command that makes one is named."""
    assert main(["capture", str(folder.path), "--kind", kind, "--simulate"]) == 1
    verb, *options = command.split(" ", 1)
    assert " ".join(["make it with `freqid", verb, folder.quoted, *options]) in capsys.readouterr().err
    assert not folder.runs.exists()


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ("voltage = 5.0", "voltage = 1.0", "the limit is ±1 V"),
        ("slew_rate = 500.0", "slew_rate = 20.0", "the limit is 20 V/s"),
        ("angle = 30.0", "angle = 20.0", "27 predicted, 18 allowed (0.9 of the stops at ±20)"),
    ],
)
def test_profile_must_keep_the_limits_of_today(
    old: str, new: str, expected: str, planned: TestFolder, change_rig: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    """A profile designed before a limit was lowered is refused with the figures, and no run is made."""
    change_rig(old, new)
    assert main(["capture", str(planned.path), "--simulate"]) == 1
    assert expected in capsys.readouterr().err
    assert not planned.runs.exists()


def test_rig_that_cannot_be_simulated_is_told(
    planned: TestFolder, change_rig: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    """A parameter that neither [simulated] nor [step_test] gives is named."""
    change_rig("damping_ratio = 0.118", "#")
    change_rig("damping_ratio = 0.12 ", "#")
    assert main(["capture", str(planned.path), "--simulate"]) == 1
    assert "[simulated] damping_ratio is missing and [step_test] has none either" in capsys.readouterr().err


def test_failed_writing_leaves_no_run(
    planned: TestFolder, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """On a full disk neither a run nor a temporary file is left."""

    def refuse(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", refuse)
    assert main(["capture", str(planned.path), "--simulate"]) == 1
    assert "No space left on device" in capsys.readouterr().err
    assert os.listdir(planned.runs) == []


def test_simulated_levels_and_runs(planned: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """Numbers after --levels, apart or by commas; every run its own file, its voltage scaled, its seed the next."""
    words = ["capture", str(planned.path), "--simulate", "--seed", "3", "--levels", "0.5", "1", "--runs", "2", "--json"]
    assert main(words) == 0
    told = json.loads(capsys.readouterr().out)["runs"]
    assert [one["run"] for one in told] == [f"response-00{n}" for n in (1, 2, 3, 4)]
    profile = read_profile(planned.profile_h5)
    half, whole = (read_run(planned.run(f"response-00{n}")).input.voltage for n in (1, 3))
    assert np.array_equal(whole, profile.voltage) and np.array_equal(half, profile.voltage / 2)
    assert "played at 0.5 times the designed voltage" in " ".join(told[0]["notes"])
    assert told[3]["notes"][-1] == "simulated with seed 6"
    assert main(["capture", str(planned.path), "--simulate", "--levels", "0.5,1"]) == 0


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (["--levels", "half"], "is no list of numbers"),
        (["--levels", "0"], "must be above 0"),
        (["--levels", "1", "-1"], "No such option"),
        (["--loopback-channel", "0"], "is no channel"),
        (["--loopback-channel", "left"], "is no channel"),
        (["--guard", "1.5"], "1.5 is not in the range"),
        (["--runs", "0"], "0 is not in the range"),
        (["--reads", "0.7"], "--reads belongs to --calibrate"),
        (["--simulate", "--angle-channel", "2"], "exclude each other"),
        (["--simulate", "--periods", "3"], "go through a sound interface"),
    ],
)
def test_wrong_usage_is_status_2(words: list[str], expected: str, planned: TestFolder, capsys: Any) -> None:
    """One line that says which word does not fit."""
    assert main(["capture", str(planned.path), *words]) == 2
    err = capsys.readouterr().err
    assert expected in err and err.count("\n") == 1
