"""freqid new: the folder of a test."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from freqid.cli import main
from freqid.rig import read_rig
from freqid.rig_template import built_in_vane, rig_sheet_text


def test_new_folder_holds_the_commented_sheet(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A folder with spaces and an é below one that is not there yet gets the template, and the next step is told."""
    path = tmp_path / "bench é" / "first test"
    assert main(["new", str(path)]) == 0
    out, err = capsys.readouterr()
    assert out == f"{path / 'rig.toml'}\n"
    assert f'freqid excite "{path}"' in err
    assert os.listdir(path) == ["rig.toml"]
    assert (path / "rig.toml").read_text(encoding="utf-8") == rig_sheet_text()
    assert read_rig(path / "rig.toml") == built_in_vane()


def test_existing_sheet_is_left_as_it_is(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A second `new` refuses and changes nothing; other files are no obstacle to a first."""
    (tmp_path / "notes.txt").write_text("mine", encoding="utf-8")
    assert main(["new", str(tmp_path)]) == 0
    (tmp_path / "rig.toml").write_text("# mine\n", encoding="utf-8")
    assert main(["new", str(tmp_path)]) == 1
    assert "exists already and is left as it is" in capsys.readouterr().err
    assert (tmp_path / "rig.toml").read_text(encoding="utf-8") == "# mine\n"


def test_file_in_the_way_is_told(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A file where the folder should be is refused and kept."""
    (tmp_path / "file").write_text("x", encoding="utf-8")
    assert main(["new", str(tmp_path / "file")]) == 1
    assert "a file of this name is in the way" in capsys.readouterr().err
    assert (tmp_path / "file").read_text(encoding="utf-8") == "x"


def test_failed_start_leaves_no_folder(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """When the sheet cannot be written, the folder made for it is gone again."""

    def refuse(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", refuse)
    assert main(["new", str(tmp_path / "test")]) == 1
    assert "No space left on device" in capsys.readouterr().err
    assert os.listdir(tmp_path) == []
