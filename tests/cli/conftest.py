"""A test folder on a disk, small enough for quick tests."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from freqid.rig_template import rig_sheet_text
from freqid.test_folder import TestFolder

Change = Callable[[str, str], None]


@pytest.fixture
def folder(tmp_path: Path) -> TestFolder:
    """A folder with a space and an é, its rig the built-in vane behind a 250 Hz output."""
    made = TestFolder(tmp_path / "a test folder é")
    made.path.mkdir()
    text = rig_sheet_text().replace("sample_rate = 1000.0", "sample_rate = 250.0")
    made.rig.write_text(text, encoding="utf-8")
    return made


@pytest.fixture
def change_rig(folder: TestFolder) -> Change:
    """Replace text that stands in the rig sheet once or more."""

    def change(old: str, new: str) -> None:
        text = folder.rig.read_text(encoding="utf-8")
        assert old in text
        folder.rig.write_text(text.replace(old, new), encoding="utf-8")

    return change
