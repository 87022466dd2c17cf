"""What is written into results/ comes back, distortion and amplitude included, and the text file says the same."""

from __future__ import annotations

import csv
import json
from dataclasses import fields
from pathlib import Path

import numpy as np
import pytest
from distorting_rig import distorted_run, multisine, odd_orders

from freqid.estimate.combination import combine
from freqid.estimate.distortion import EVEN, ODD
from freqid.estimate.identification import Identification, identify
from freqid.estimate.result_files import read_identification, write_identification
from freqid.test_folder import TestFolder


def stronger_and_cubic(value: np.ndarray) -> np.ndarray:
    """The larger voltage is passed on a third stronger, with third-order distortion: 2 % at 1 V."""
    return value * 4 / 3 + 0.02 * value**3


def straight(value: np.ndarray) -> np.ndarray:
    """The smaller one as it is."""
    return value


@pytest.fixture(scope="module")
def found() -> Identification:
    """Two runs of a rig that answers the larger voltage more strongly: the model is that of the last."""
    orders = odd_orders(31, 1)
    runs = [
        distorted_run(multisine(orders, 1, rms=rms), number, before=before)
        for number, (rms, before) in enumerate(((0.3, straight), (1.0, stronger_and_cubic)))
    ]
    return combine([identify(run) for run in runs])


@pytest.fixture(scope="module")
def folder(found: Identification, tmp_path_factory: pytest.TempPathFactory) -> TestFolder:
    """A folder that holds the results."""
    path = tmp_path_factory.mktemp("vane with a space") / "Prüfstand"
    path.mkdir()
    (path / "rig.toml").write_text("", encoding="utf-8")
    folder = TestFolder(path)
    write_identification(folder, found, computed_from=[])
    return folder


def test_everything_comes_back(found: Identification, folder: TestFolder) -> None:
    """Model, amplitude, dependence and distortion as they were, arrays to the last bit."""
    again = read_identification(folder)
    assert again.model.amplitude == found.model.amplitude
    assert again.model.dependence == found.model.dependence
    assert again.model.distortion == found.model.distortion
    assert found.model.dependence is not None and len(found.model.distortion) == 2
    for name in ("response", "distortion"):
        one, other = getattr(found, name), getattr(again, name)
        for field in fields(one):
            if "unit" in field.metadata:
                np.testing.assert_array_equal(getattr(other, field.name), getattr(one, field.name))


def test_json_says_at_which_amplitude(found: Identification, folder: TestFolder) -> None:
    """1 V rms; the gain rises by 1/3 and 0.06 (1 - 1/24) from the cube, 39.1 % within a full width of its interval."""
    content = json.loads(Path(folder.model).read_text(encoding="utf-8"))
    assert content["amplitude"]["rms_voltage"] == pytest.approx(1.0)
    gain = content["amplitude"]["dependence"]["trends"]["gain"]
    low, high = gain["change"]["interval_95"]
    assert gain["significant"]
    assert gain["change"]["value"] == pytest.approx(1 / 3 + 0.06 * (1 - 1 / 24), abs=high - low)
    assert high - low < 0.2
    assert [row["kind"] for row in content["distortion"]] == ["odd", "even"]
    assert content["distortion"][0]["significant"]
    assert "amplitude_dependent_gain" in [row["code"] for row in content["warnings"]]


def test_the_text_file_holds_noise_and_distortion(found: Identification, folder: TestFolder) -> None:
    """One row a line, every cell a number, the columns those of the arrays (nine digits)."""
    with Path(folder.response_csv).open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert found.distortion is not None and found.response.nonlinear is not None
    frequency = found.response.frequency
    expected = {
        "frequency_Hz": frequency,
        "noise_deg": found.response.noise,
        "nonlinear_deg": found.response.nonlinear,
        "even_distortion_deg": found.distortion.at(frequency, EVEN),
        "odd_distortion_deg": found.distortion.at(frequency, ODD),
    }
    for name, column in expected.items():
        np.testing.assert_allclose([float(row[name]) for row in rows], column, rtol=1e-8)
