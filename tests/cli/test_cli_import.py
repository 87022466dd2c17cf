"""freqid import: logs made elsewhere come back as the streams they hold."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.io import wavfile

from freqid.cli import main
from freqid.records import Run
from freqid.run_file import read_run
from freqid.test_folder import TestFolder


@pytest.fixture
def driven(planned: TestFolder, capsys: pytest.CaptureFixture[str]) -> Run:
    """A simulated run in the folder, to be logged and brought in again."""
    assert main(["capture", str(planned.path), "--simulate", "--seed", "1"]) == 0
    capsys.readouterr()
    return read_run(planned.run("response-001"))


def write_log(path: Path, header: str, *columns: np.ndarray) -> Path:
    """Columns as CSV, to the last digit."""
    rows = [",".join(repr(float(value)) for value in row) for row in zip(*columns, strict=True)]
    path.write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
    return path


def imported(folder: TestFolder, capsys: pytest.CaptureFixture[str], *words: str) -> tuple[Run, dict[str, Any]]:
    """The run and what `freqid import FOLDER --json` told of it."""
    assert main(["import", str(folder.path), "--json", *words]) == 0
    told = json.loads(capsys.readouterr().out)
    return read_run(folder.path / told["file"]), told


def test_angle_log_with_the_profile_is_the_run_again(
    driven: Run, folder: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """The angle comes back to the last bit, the voltage is that of the profile, and both origins have their sha256."""
    log = write_log(folder.path / "vane é.csv", "time (s),angle (deg)", driven.angle.time, driven.angle.angle)
    run, told = imported(folder, capsys, "--input", "profile", "--angle", str(log))
    assert run.name == "response-002" and not run.simulated and not run.common_clock
    assert np.array_equal(run.angle.time, driven.angle.time)
    assert np.array_equal(run.angle.angle, driven.angle.angle)
    assert np.array_equal(run.input.voltage, driven.input.voltage) and run.input.commanded
    assert run.input.periodicity is not None and driven.input.periodicity is not None
    assert run.input.periodicity.period == driven.input.periodicity.period
    hashes = {hashlib.sha256(path.read_bytes()).hexdigest() for path in (log, folder.profile_h5)}
    assert {origin["sha256"] for origin in told["origins"]} == hashes


def test_one_log_is_on_one_clock(folder: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """Both columns of one file, chosen by name and by number, share the clock; units and hold are as asked."""
    time = np.arange(400) / 100
    voltage, angle = np.sin(time * 3), np.sin(time * 3 - 0.4) / 10
    log = write_log(folder.path / "log.csv", "t,drive,reading", time * 1000, voltage, angle)
    run, told = imported(
        folder, capsys, "--log", str(log), "--kind", "step", "--time-column", "t", "--input-column", "2",
        "--angle-column", "reading", "--time-unit", "ms", "--angle-unit", "rad", "--hold", "smooth",
    )  # fmt: skip
    assert (run.name, run.kind, run.common_clock, run.input.hold) == ("step-001", "step", True, "smooth")
    assert np.array_equal(run.input.voltage, voltage)
    # A product and a quotient by a thousand, and degrees from radians: a few roundings of 1.1e-16 each.
    np.testing.assert_allclose(run.angle.time, time, rtol=1e-15, atol=0)
    np.testing.assert_allclose(run.angle.angle, np.degrees(angle), rtol=1e-15, atol=0)
    assert run.angle.angle_unit == "deg"
    assert told["common_clock"] is True and told["origins"][0]["source"] == "log.csv"


def test_two_logs_are_on_two_clocks(driven: Run, folder: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """A log of the voltage and a log of the angle each keep their own times."""
    angle = write_log(folder.path / "angle.csv", "time (s),angle (deg)", driven.angle.time, driven.angle.angle)
    voltage = write_log(folder.path / "input.csv", "time (s),voltage (V)", driven.input.time, driven.input.voltage)
    run, _ = imported(folder, capsys, "--input", str(voltage), "--angle", str(angle))
    assert not run.common_clock and not run.input.commanded
    assert np.array_equal(run.input.voltage, driven.input.voltage)
    assert np.array_equal(run.angle.time, driven.angle.time)


def test_sample_rate_gives_times_to_a_log_without(folder: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """A log of bare samples gets its times from --sample-rate."""
    phase = np.arange(300) / 20
    log = write_log(folder.path / "bare.csv", "voltage (V),angle (deg)", np.sin(phase), np.sin(phase - 1))
    run, _ = imported(folder, capsys, "--log", str(log), "--sample-rate", "60")
    # n / 60 in double precision, whichever way it is computed: two roundings.
    np.testing.assert_allclose(run.angle.time, np.arange(300) / 60, rtol=3e-16, atol=0)


def test_table_tells_the_run_and_notes_are_on_stderr(
    driven: Run, folder: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """People see what was brought in on stdout, and what was decided on stderr."""
    log = write_log(folder.path / "vane.csv", "time (s),angle (deg)", driven.angle.time, driven.angle.angle)
    assert main(["import", str(folder.path), "--input", "profile", "--angle", str(log)]) == 0
    out, err = capsys.readouterr()
    assert "response-002" in out and f"{driven.angle.time.size} frames" in out and "two, offset unknown" in out
    assert err.count("note: ") == len(read_run(folder.run("response-002")).notes) > 0


@pytest.mark.parametrize(
    ("text", "words", "expected"),
    [
        (None, [], "log.csv"),
        ("", [], "log.csv"),
        ("a,b,c\n" + "".join(f"{n},{n * 2},{n % 7}\n" for n in range(50)), [], "--"),
        ("t,u,y\n" + "".join(f"{n / 10},{n % 3},{n % 7}\n" for n in range(5)), [], "5 samples"),
    ],
)
def test_unusable_log_is_told_and_no_run_is_made(
    text: str | None, words: list[str], expected: str, folder: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """A missing, empty, ambiguous or too short log is status 1, one line, and leaves no run."""
    log = folder.path / "log.csv"
    if text is not None:
        log.write_text(text, encoding="utf-8")
    assert main(["import", str(folder.path), "--log", str(log), *words]) == 1
    out, err = capsys.readouterr()
    assert out == "" and err.count("\n") == 1 and expected in err and "unexpected" not in err
    assert not folder.runs.exists()


def test_missing_profile_is_told_with_the_remedy(folder: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """`--input profile` needs a profile."""
    assert main(["import", str(folder.path), "--input", "profile", "--angle", "x.csv"]) == 1
    assert f"make it with `freqid excite {folder.quoted}`" in capsys.readouterr().err


def test_wav_of_the_angle_needs_its_full_scale(
    folder: TestFolder, change_rig: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    """Digital samples of the angle mean nothing without [angle_sensor] full_scale; with it they do."""
    phase = np.arange(2000) / 20
    samples = np.column_stack([np.sin(phase), np.sin(phase - 1)]).astype(np.float32)
    path = folder.path / "both.wav"
    wavfile.write(path, 500, samples)
    words = ["import", str(folder.path), "--log", str(path), "--input-column", "1", "--angle-column", "2"]
    assert main(words) == 0
    run = read_run(folder.run("response-001"))
    # The samples times 45 deg: single precision converts to double exactly, one rounding in the product.
    np.testing.assert_allclose(run.angle.angle, samples[:, 1].astype(float) * 45.0, rtol=2e-16, atol=0)
    capsys.readouterr()
    change_rig("full_scale = 45.0", "#")
    assert main(words) == 1
    assert "[angle_sensor] full_scale is missing, and both.wav counts in it" in capsys.readouterr().err
