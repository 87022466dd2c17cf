"""The whole job through the command line: from a rig sheet to a verdict and a page, and what goes wrong on the way."""

from __future__ import annotations

import json
import re
import shutil
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from freqid.cli import main
from freqid.test_folder import TestFolder

README = Path(__file__).parents[2] / "README.md"
TRUE = {"gain": 12.1, "natural_frequency": 3.02, "damping_ratio": 0.118}  # [simulated] of the built-in vane


@pytest.fixture(scope="module")
def rehearsed(tmp_path_factory: pytest.TempPathFactory) -> TestFolder:
    """A finished rehearsal, in a folder with a space and an accent; tests that change it copy it first."""
    path = tmp_path_factory.mktemp("whole job") / "vane é"
    assert main(["rehearse", str(path)]) == 0
    return TestFolder(path)


@pytest.fixture
def copied(rehearsed: TestFolder, tmp_path: Path) -> TestFolder:
    """A copy that a test may change."""
    return TestFolder(shutil.copytree(rehearsed.path, tmp_path / "copy of vane"))


def _json(path: Path) -> dict[str, Any]:
    text = path.read_text(encoding="utf-8")
    content: dict[str, Any] = json.loads(text, parse_constant=lambda word: pytest.fail(word))
    return content


def test_rehearsal_makes_every_file_of_a_test(rehearsed: TestFolder) -> None:
    """All boxes of the flow are there, and nothing temporary."""
    names = {file.relative_to(rehearsed.path).as_posix() for file in rehearsed.path.rglob("*") if file.is_file()}
    profiles = {f"{stem}.{ending}" for stem in ("profile", "step_profile") for ending in ("h5", "csv", "wav", "json")}
    made = ("response.h5", "response.csv", "model.json", "step.json", "crosscheck.json")
    results = {f"results/{name}" for name in made}
    assert profiles | results | {"rig.toml", "runs/response-001.h5", "runs/step-001.h5", "report.html"} <= names
    assert {"figures/profile_card.svg", "figures/step_profile_card.svg"} <= names
    assert not [name for name in names if ".part" in name or "tmp" in name]


@pytest.mark.parametrize("which", ["model", "step"])
def test_results_hold_the_simulated_rig(rehearsed: TestFolder, which: str) -> None:
    """Each parameter lies within five standard uncertainties of the truth (a chance of 6e-7 each to miss)."""
    parameters = _json(getattr(rehearsed, which))["parameters"]
    for name, truth in TRUE.items():
        q = parameters[name]
        assert abs(q["value"] - truth) < 5 * q["standard_uncertainty"]
        assert q["interval_95"][0] < q["value"] < q["interval_95"][1]
    assert parameters["delay"]["includes_clock_offset"] is True


def test_clock_of_the_sensor_is_found(rehearsed: TestFolder) -> None:
    """+150 ppm and the lost frames of the built-in vane come out of the record."""
    clock = _json(rehearsed.model)["clock"]
    assert abs(clock["ratio_ppm"]["value"] - 150) < 5 * clock["ratio_ppm"]["standard_uncertainty"]
    # 2 % of some 4000 frames are lost: 80 +- 9
    assert 35 < clock["lost_frames"] < 125


def test_covariance_belongs_to_the_parameters(rehearsed: TestFolder) -> None:
    """The diagonal is the square of the standard uncertainties, the matrix symmetric and positive."""
    model = _json(rehearsed.model)
    covariance = np.array(model["covariance"])
    stated = [model["parameters"][name]["standard_uncertainty"] for name in model["parameter_order"]]
    np.testing.assert_allclose(np.sqrt(np.diag(covariance)), stated, rtol=1e-9)
    scale = np.array(stated)
    assert np.all(np.linalg.eigvalsh(covariance / np.outer(scale, scale)) > 0)


def test_response_csv_is_the_response(rehearsed: TestFolder) -> None:
    """The text file holds the same frequencies as the model's band, ascending, with positive uncertainties."""
    lines = rehearsed.response_csv.read_text(encoding="utf-8").splitlines()
    table = np.array([[float(cell) for cell in line.split(",")] for line in lines[1:]])
    assert lines[0].startswith("frequency_Hz,gain_deg_per_V,")
    assert np.all(np.diff(table[:, 0]) > 0) and np.all(table[:, 2] > 0)
    assert np.all((table[:, 5] > 0) & (table[:, 5] <= 1))


def test_verdict_of_the_same_rig_is_agree(rehearsed: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """Both tests saw one rig: agree, status 0, and --json is the file's content."""
    assert main(["crosscheck", str(rehearsed.path), "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["verdict"] == "agree" == _json(rehearsed.crosscheck)["verdict"]
    assert {row["quantity"] for row in told["compared"]} >= {*TRUE, "delay", "resonance_frequency", "half_power_width"}


def test_another_rig_in_the_step_test_disagrees(copied: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """A damping ratio 40 % higher in the step test than in the frequency test is found: status 3, named, next test
    proposed.
    """
    sheet = copied.rig.read_text(encoding="utf-8")
    copied.rig.write_text(_simulated(sheet, damping_ratio=0.165), encoding="utf-8")
    for words in (["capture", "--kind", "step", "--simulate", "--seed", "3"], ["steptest"]):
        assert main([words[0], str(copied.path), *words[1:]]) == 0
    capsys.readouterr()
    assert main(["crosscheck", str(copied.path)]) == 3
    out = capsys.readouterr().out
    assert "DISAGREE: the damping ratio differs by" in out and "Next: freqid excite" in out


def test_noise_makes_it_unresolved(copied: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """With 20 deg of noise the step test cannot tell: status 4, and the next test says how long."""
    sheet = copied.rig.read_text(encoding="utf-8")
    copied.rig.write_text(_simulated(sheet, noise=20.0), encoding="utf-8")
    for words in (["capture", "--kind", "step", "--simulate", "--seed", "4"], ["steptest"]):
        assert main([words[0], str(copied.path), *words[1:]]) == 0
    capsys.readouterr()
    assert main(["crosscheck", str(copied.path)]) == 4
    out = capsys.readouterr().out
    assert "UNRESOLVED" in out and re.search(r"Next: freqid excite .* --kind step --duration \d+", out)


def _simulated(sheet: str, **values: float) -> str:
    head, _, tail = sheet.partition("[simulated]")
    for key, value in values.items():
        line = f"\n{key} = {value}"
        tail, n = re.subn(rf"\n#? ?{key} = [^\n]*", line, tail, count=1)
        assert n == 1, key
    return f"{head}[simulated]{tail}"


def test_report_refuses_results_that_do_not_belong_together(
    copied: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """A cross-check of an older step test is not shown as if it were of this one."""
    for words in (["capture", "--kind", "step", "--simulate", "--seed", "9"], ["steptest"]):
        assert main([words[0], str(copied.path), *words[1:]]) == 0
    capsys.readouterr()
    assert main(["report", str(copied.path)]) == 1
    err = capsys.readouterr().err
    assert "computed from another results/step.json" in err and "freqid crosscheck" in err


def test_several_runs_combine(copied: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """Two runs of one rig give smaller uncertainties than one, by about the square root of two."""
    one = _json(copied.model)["parameters"]["damping_ratio"]["standard_uncertainty"]
    assert main(["capture", str(copied.path), "--simulate", "--seed", "11"]) == 0
    capsys.readouterr()
    assert main(["estimate", str(copied.path), "--run", "all", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["runs"] == ["response-001", "response-002"]
    # both runs have the same profile; only their lost frames differ (2 % each)
    assert told["parameters"]["damping_ratio"]["standard_uncertainty"] == pytest.approx(one / np.sqrt(2), rel=0.06)


def test_methods_agree(copied: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """The local polynomial method on the periodic record gives the same model within its uncertainty."""
    first = _json(copied.model)["parameters"]
    assert main(["estimate", str(copied.path), "--method", "local-polynomial", "--json"]) == 0
    second = json.loads(capsys.readouterr().out)["parameters"]
    for name in TRUE:
        # same data, same fit, other weights: they differ by much less than one standard uncertainty
        assert abs(first[name]["value"] - second[name]["value"]) < first[name]["standard_uncertainty"]


@pytest.mark.parametrize(
    ("verb", "says"),
    [
        ("estimate", "holds no response run"),
        ("steptest", "holds no step run"),
        ("crosscheck", "freqid estimate"),
        ("report", "nothing to report yet"),
    ],
)
def test_verb_too_early_says_what_to_do_first(
    verb: str, says: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """One line, status 1, and no file is left behind."""
    folder = tmp_path / "vane"
    assert main(["new", str(folder)]) == 0
    capsys.readouterr()
    assert main([verb, str(folder)]) == 1
    err = capsys.readouterr().err
    assert says in err and err.count("\n") == 1
    assert [file.name for file in folder.rglob("*") if file.is_file()] == ["rig.toml"]


@pytest.mark.parametrize(("name", "verb"), [("model", "crosscheck"), ("step", "crosscheck"), ("crosscheck", "report")])
def test_damaged_result_is_one_line(
    copied: TestFolder, name: str, verb: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """A result file cut short, or without a key, is named with the command that makes it again."""
    path: Path = getattr(copied, name)
    content = _json(path)
    bare = json.dumps({"format": content["format"], "format_version": 1})
    for text in (path.read_text(encoding="utf-8")[:200], bare):
        path.write_text(text, encoding="utf-8")
        assert main([verb, str(copied.path)]) == 1
        err = capsys.readouterr().err
        assert str(path.name) in err and err.count("\n") == 1 and "Traceback" not in err


def test_readme_python_example_runs(
    rehearsed: TestFolder, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """The ten lines of the README, run as they stand beside a finished test."""
    code = re.search(r"```python\n(.*?)```", README.read_text(encoding="utf-8"), re.DOTALL)
    assert code is not None
    place = rehearsed.path.as_posix()
    exec(code[1].replace('"vane/', f'"{place}/'), {})
    out = capsys.readouterr().out
    assert "natural_frequency 3.0" in out and "agree" in out


def test_ci_runs_the_test_command_of_the_readme() -> None:
    """README's second set-up command is the last line of .ci/run, to the letter."""
    blocks = re.findall(r"```\n(python3 -m venv[^\n]*)\n```", README.read_text(encoding="utf-8"))
    assert len(blocks) == 2
    assert (README.parent / ".ci" / "run").read_text(encoding="utf-8").splitlines()[-1] == blocks[1]
