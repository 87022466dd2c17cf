"""`freqid coefficients`: the model for a controller, with its uncertainty."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import numpy as np
import pytest
from report_rig import VANE, covariance, identification, step_result

from freqid.cli import main
from freqid.discrete_model import held_equivalent
from freqid.estimate.result_files import write_identification
from freqid.second_order import SecondOrder
from freqid.step_test.result_file import write_step_result
from freqid.test_folder import TestFolder


@pytest.fixture
def modelled(folder: TestFolder) -> TestFolder:
    """A folder that holds the results of the report's vane, on one clock."""
    write_identification(folder, identification(offset_known=True), computed_from=[])
    write_step_result(folder, step_result(), computed_from=[])
    return folder


def test_json_holds_both_forms(modelled: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """The coefficients are those of the model in model.json, continuous and at the rate, and the file says the same."""
    capsys.readouterr()
    assert main(["coefficients", str(modelled.path), "--controller-rate", "200", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    model = json.loads(modelled.model.read_text(encoding="utf-8"))["transfer_function"]
    assert told["continuous"]["numerator"]["value"] == pytest.approx(model["numerator"], rel=1e-12)
    assert told["continuous"]["denominator"]["value"] == pytest.approx(model["denominator"], rel=1e-12)
    found = held_equivalent(VANE, sample_rate=200.0)
    assert told["discrete"]["numerator"]["value"] == pytest.approx(list(found.numerator), rel=1e-9)
    assert told["discrete"]["delay_samples"] == 4 and told["warnings"] == []
    written = json.loads((modelled.results / "coefficients.json").read_text(encoding="utf-8"))
    assert {key: written[key] for key in told} == told
    assert list(written["computed_from"]) == ["results/model.json"]


def test_uncertainty_is_that_of_the_parameters(modelled: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """The scatter of coefficients over random parameters is the standard uncertainty stated."""
    capsys.readouterr()
    assert main(["coefficients", str(modelled.path), "--controller-rate", "60", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    # the delay is 1.2 samples at 60 Hz: the count of whole samples is the same in every draw
    rng = np.random.default_rng(1)
    drawn = rng.multivariate_normal(VANE.vector, covariance(), size=4000)
    models = [SecondOrder.from_vector(vector) for vector in drawn]
    scatter = np.std([held_equivalent(m, sample_rate=60.0).numerator[1:3] for m in models], axis=0)
    # the standard deviation of 4000 draws is known to 1.1 %; four of these
    np.testing.assert_allclose(told["discrete"]["numerator"]["standard_uncertainty"][1:3], scatter, rtol=0.045)
    scatter = np.std([m.coefficients()[1][1:] for m in models], axis=0)
    np.testing.assert_allclose(told["continuous"]["denominator"]["standard_uncertainty"][1:], scatter, rtol=0.045)


def test_csv_has_a_row_per_coefficient(modelled: TestFolder) -> None:
    """Part, power, value and uncertainty; 1 + 3 continuous, 4 + 3 discrete, delay and rate."""
    assert main(["coefficients", str(modelled.path), "--controller-rate", "200"]) == 0
    with (modelled.results / "coefficients.csv").open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [row["power"] for row in rows[:4]] == ["s^0", "s^2", "s^1", "s^0"]
    assert [row["power"] for row in rows[4:8]] == ["z^-4", "z^-5", "z^-6", "z^-7"] and len(rows) == 13
    assert float(rows[-2]["value"]) == pytest.approx(0.02) and rows[-1]["part"] == "sample_rate_Hz"


def test_a_delay_with_an_unknown_offset_is_left_out(
    folder: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """On two clocks the delay is not the rig's: without --delay it is left out, and that is said."""
    write_identification(folder, identification(), computed_from=[])
    capsys.readouterr()
    assert main(["coefficients", str(folder.path), "--controller-rate", "100", "--json"]) == 0
    out, err = capsys.readouterr()
    told = json.loads(out)
    assert told["continuous"]["delay"] == 0 and told["warnings"][0]["code"] == "delay_left_out" and "--delay" in err
    assert main(["coefficients", str(folder.path), "--controller-rate", "100", "--delay", "0.03", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["continuous"]["delay"] == 0.03 and told["discrete"]["delay_samples"] == 3 and not told["warnings"]


def test_model_of_the_step_test(modelled: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """--test step takes the other model, and says so."""
    capsys.readouterr()
    assert main(["coefficients", str(modelled.path), "--test", "step", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    gain = told["continuous"]["numerator"]["value"][0] / told["continuous"]["denominator"]["value"][2]
    step = json.loads(modelled.step.read_text(encoding="utf-8"))["parameters"]["gain"]["value"]
    assert told["test"] == "step" and gain == pytest.approx(step, rel=1e-12)


def test_without_a_model_it_says_what_to_do(folder: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """One line, status 1, nothing written."""
    capsys.readouterr()
    assert main(["coefficients", str(folder.path)]) == 1
    err = capsys.readouterr().err
    assert "freqid estimate" in err and err.count("\n") == 1 and not Path(folder.results).exists()


@pytest.mark.parametrize(
    ("key", "value"),
    [
        ("covariance", None),
        ("covariance", [[1.0]]),
        ("angle_unit", 3),
        ("transfer_function", {"numerator": [], "denominator": [], "delay": 0}),
        ("transfer_function", {"numerator": [1.0], "denominator": [1.0, 1.0, 0.0], "delay": 0}),
        ("clock", None),
    ],
)
def test_a_damaged_model_is_told(
    key: str, value: object, modelled: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """One line that names the file and the command that makes it again; status 1."""
    content = json.loads(modelled.model.read_text(encoding="utf-8"))
    modelled.model.write_text(json.dumps({**content, key: value}), encoding="utf-8")
    capsys.readouterr()
    assert main(["coefficients", str(modelled.path)]) == 1
    err = capsys.readouterr().err
    assert "model.json: damaged" in err and "freqid estimate" in err and err.count("\n") == 1
    assert "unexpected fault" not in err
