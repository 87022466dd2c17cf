"""Two logs as instruments really write them: a camera that counts frames, a converter that counts milliseconds."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from freqid.cli import main
from freqid.run_file import read_run
from freqid.test_folder import TestFolder

FRAMES = np.delete(np.arange(1, 241), [50, 51, 120])  # 4 s at 60 Hz, three frames lost
MIDNIGHT = 9 * 3600e3 + 13 * 60e3 + 21345.0  # 09:13:21.345 in ms


@pytest.fixture
def logs(tmp_path: Path) -> tuple[TestFolder, Path, Path]:
    """A folder, a camera log with German header, decimal commas and frame numbers, and a converter log in ms and mV."""
    assert main(["new", str(tmp_path / "Prüfstand")]) == 0
    camera, converter = tmp_path / "Kamera Messung.csv", tmp_path / "wandler.txt"
    rows = [f"{n};{np.sin(n / 9):.3f};0.98".replace(".", ",") for n in FRAMES]
    camera.write_text("Bildnummer;Winkel [°];Güte\n" + "\n".join(rows) + "\n", encoding="utf-8-sig")
    rows = [f"{MIDNIGHT + n:.1f}\t{1e3 * np.sin(n / 150):.2f}" for n in range(4000)]
    text = "# channel 0\nms since midnight\tdrive (mV)\n" + "\n".join(rows) + "\n"
    converter.write_text(text, encoding="utf-8")
    return TestFolder(tmp_path / "Prüfstand"), camera, converter


def test_frame_rate_is_asked_for(
    logs: tuple[TestFolder, Path, Path], capsys: pytest.CaptureFixture[str]
) -> None:
    """Without a rate frame numbers are no times: the message names the column and the option."""
    folder, camera, converter = logs
    capsys.readouterr()
    assert main(["import", str(folder.path), "--input", str(converter), "--angle", str(camera)]) == 1
    err = capsys.readouterr().err
    assert '"Bildnummer" seems to count frames: give --sample-rate' in err and err.count("\n") == 1


def test_each_log_keeps_its_own_times(logs: tuple[TestFolder, Path, Path]) -> None:
    """The rate serves the camera's frame numbers; the converter's milliseconds since midnight stay times, mV are V."""
    folder, camera, converter = logs
    words = ["import", str(folder.path), "--input", str(converter), "--angle", str(camera), "--sample-rate", "60"]
    assert main(words) == 0
    run = read_run(folder.run("response-001"))
    # printed to 0.1 ms and 0.01 mV, and to 0.001 deg
    np.testing.assert_allclose(run.input.time, (MIDNIGHT + np.arange(4000)) / 1e3, atol=1e-4)
    np.testing.assert_allclose(run.input.voltage, np.sin(np.arange(4000) / 150), atol=6e-6)
    np.testing.assert_allclose(run.angle.time, FRAMES / 60, rtol=1e-12)
    np.testing.assert_allclose(run.angle.angle, np.sin(FRAMES / 9), atol=6e-4)


def test_frame_numbers_under_a_name_that_says_nothing(
    logs: tuple[TestFolder, Path, Path], capsys: pytest.CaptureFixture[str]
) -> None:
    """A column that counts under an unknown name is asked about; named as the time, it is the frame number."""
    folder, camera, converter = logs
    camera.write_text(camera.read_text(encoding="utf-8-sig").replace("Bildnummer", "Lfd. Nr."), encoding="utf-8")
    words = ["import", str(folder.path), "--input", str(converter), "--angle", str(camera), "--sample-rate", "60"]
    capsys.readouterr()
    assert main(words) == 1
    assert '"Lfd. Nr." runs like a time' in capsys.readouterr().err
    assert main([*words, "--time-column", "1"]) == 0
    np.testing.assert_allclose(read_run(folder.run("response-001")).angle.time, FRAMES / 60, rtol=1e-12)


def test_a_column_that_runs_like_a_time_is_not_passed_over(
    logs: tuple[TestFolder, Path, Path], capsys: pytest.CaptureFixture[str]
) -> None:
    """With a rate given, a nameless time is asked about rather than replaced by counted rows."""
    folder, camera, converter = logs
    text = converter.read_text(encoding="utf-8").replace("ms since midnight", "kanal 7")
    converter.write_text(text, encoding="utf-8")
    capsys.readouterr()
    words = ["import", str(folder.path), "--input", str(converter), "--angle", str(camera), "--sample-rate", "60"]
    assert main(words) == 1
    err = capsys.readouterr().err
    assert '"kanal 7" runs like a time' in err and "--time-column" in err and err.count("\n") == 1
