"""Whole folders held against each other, on the command line: two dampings of one torsion oscillator, and a sheet.

Source: the torsion_oscillator data (terms in the README beside them). Published, from amplitudes alone: 0.6956 Hz and a
damping ratio of 0.120 for run_b; 0.6988 Hz and 0.335 for run_d.
"""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from freqid.cli import main
from freqid.estimate.result_files import read_identification
from freqid.stages.comparison import compare_folders
from freqid.test_folder import TestFolder

SHEET = """
[rig]
name = "torsion oscillator"
angle_unit = "rad"
[limits]
voltage = 10.0
slew_rate = 1000.0
angle = 10.0
[output]
sample_rate = 50.0
hold = "smooth"
full_scale = 10.0
[angle_sensor]
sample_rate = 50.0
exposure = 0.0
stamp = "end"
noise = 0.01
"""


@pytest.fixture(scope="module")
def folders(open_data: Path, tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """Both runs imported and estimated, each in a folder of its own."""
    made = []
    for name in ("run_b", "run_d"):
        folder = tmp_path_factory.mktemp("torsion") / name
        folder.mkdir()
        (folder / "rig.toml").write_text(SHEET, encoding="utf-8")
        log = open_data / "torsion_oscillator" / f"{name}.csv"
        assert main(["import", str(folder), "--log", str(log), *COLUMNS]) == 0
        assert main(["estimate", str(folder)]) == 0
        made.append(folder)
    return made[0], made[1]


COLUMNS = ["--time-column", "1", "--input-column", "3", "--angle-column", "2", "--angle-unit", "rad"]


def test_two_dampings_disagree_in_the_damping_ratio(folders: tuple[Path, Path]) -> None:
    """0.12 against 0.34: far beyond the tolerance; the natural frequencies as their intervals say."""
    one, other = (TestFolder(folder) for folder in folders)
    comparison = compare_folders([one, other])
    (check,) = comparison.checks
    rows = {row.quantity: row for row in check.compared}
    assert comparison.verdict == check.verdict == "disagree"
    assert rows["damping_ratio"].verdict == "disagree"
    first, second = (read_identification(f).model.model.damping_ratio for f in (one, other))
    assert first == pytest.approx(0.125, rel=0.05)  # a fit in the time domain gives 0.125 and 0.339
    assert second == pytest.approx(0.339, rel=0.05)
    difference, tolerance = rows["natural_frequency"].difference, rows["natural_frequency"].tolerance
    assert difference is not None
    assert tolerance is not None
    low, high = difference.interval_95
    within, beyond = -tolerance <= low and high <= tolerance, low > 0 or high < 0
    expected = "agree" if within else "disagree" if beyond and abs(difference.value) > tolerance else "unresolved"
    assert rows["natural_frequency"].verdict == expected
    assert check.labels == (f"{folders[0]}, frequency test", f"{folders[1]}, frequency test")


def test_the_command_says_so_and_leaves_the_cross_check_alone(
    folders: tuple[Path, Path], capsys: pytest.CaptureFixture[str]
) -> None:
    """Exit status 3, both folders named, the result in the first one's results/comparison.json."""
    capsys.readouterr()
    assert main(["crosscheck", str(folders[0]), str(folders[1]), "--json"]) == 3
    told = json.loads(capsys.readouterr().out)
    kept = json.loads((folders[0] / "results" / "comparison.json").read_text(encoding="utf-8"))
    assert told["format"] == kept["format"] == "freqid comparison"
    assert told["comparisons"] == kept["comparisons"]
    assert not (folders[0] / "results" / "crosscheck.json").exists()
    assert not (folders[1] / "results" / "comparison.json").exists()


def test_the_published_values_as_an_old_sheet(
    folders: tuple[Path, Path], capsys: pytest.CaptureFixture[str]
) -> None:
    """run_b against 0.6956 Hz and 0.120, each allowed 2 % and 10 %: agree, and in words."""
    typed = ["--against", "natural_frequency=0.6956 ± 0.001", "--against", "damping_ratio=0.120 ± 0.001"]
    capsys.readouterr()
    assert main(["crosscheck", str(folders[0]), *typed]) == 0
    assert "AGREE: Both tests give the same natural frequency and damping ratio" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--against", "damping=0.1"], "did you mean 'damping_ratio'?"),
        (["--against", "gain=1", "no such folder"], "give either other folders or --against, not both"),
        (["no such folder"], "no such test folder"),
        (["{first}/../run_b"], "named twice"),
        (["--against", "peak_time=0", "--against", "damping_ratio=0.1"], "peak_time = 0 s: must be above 0"),
    ],
)
def test_bad_input_is_one_line(
    words: list[str], said: str, folders: tuple[Path, Path], capsys: pytest.CaptureFixture[str]
) -> None:
    """What, and what to do; no traceback."""
    capsys.readouterr()
    assert main(["crosscheck", str(folders[0]), *(word.format(first=folders[0]) for word in words)]) in (1, 2)
    told = capsys.readouterr()
    assert said in told.err
    assert "Traceback" not in told.err


def test_a_folder_without_results_says_what_to_run(folders: tuple[Path, Path], tmp_path: Path) -> None:
    """The commands that make them."""
    (tmp_path / "rig.toml").write_text(SHEET, encoding="utf-8")
    assert main(["crosscheck", str(folders[0]), str(tmp_path)]) == 1
