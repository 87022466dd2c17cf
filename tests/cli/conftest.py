"""A test folder on a disk, small enough for quick tests."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from freqid.cli import main
from freqid.rig_template import rig_sheet_text
from freqid.test_folder import TestFolder

Change = Callable[[str, str], None]


def vane_folder(above: Path) -> TestFolder:
    """A folder with a space and an é, its rig the built-in vane behind a 250 Hz output."""
    made = TestFolder(above / "a test folder é")
    made.path.mkdir()
    text = rig_sheet_text().replace("sample_rate = 1000.0", "sample_rate = 250.0")
    made.rig.write_text(text, encoding="utf-8")
    return made


@pytest.fixture
def folder(tmp_path: Path) -> TestFolder:
    """A folder of the vane with nothing in it but its rig sheet."""
    return vane_folder(tmp_path)


@pytest.fixture(scope="session")
def designed_once(tmp_path_factory: pytest.TempPathFactory) -> TestFolder:
    """A folder of the vane with a short multisine, to be copied."""
    made = vane_folder(tmp_path_factory.mktemp("designed"))
    assert main(["excite", str(made.path), "--duration", "12", "--band", "1", "8"]) == 0
    return made


@pytest.fixture
def planned(folder: TestFolder, designed_once: TestFolder) -> TestFolder:
    """The folder with a short profile in it."""
    shutil.copytree(designed_once.path, folder.path, dirs_exist_ok=True)
    return folder


@pytest.fixture
def change_rig(folder: TestFolder) -> Change:
    """Replace text that stands in the rig sheet once or more."""

    def change(old: str, new: str) -> None:
        text = folder.rig.read_text(encoding="utf-8")
        assert old in text
        folder.rig.write_text(text.replace(old, new), encoding="utf-8")

    return change
