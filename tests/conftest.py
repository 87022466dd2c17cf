"""Where do the tests find the open data? In `FREQID_OPEN_DATA`, else in `../shared/open_data` beside the checkout."""

from __future__ import annotations

import os
from pathlib import Path

import pytest


@pytest.fixture(scope="session")
def open_data() -> Path:
    """The folder of measured open data; the test is skipped where it is missing."""
    beside = Path(__file__).resolve().parents[2] / "shared" / "open_data"
    folder = Path(os.environ.get("FREQID_OPEN_DATA") or beside)
    if not folder.is_dir():
        pytest.skip(f"no open data in {folder}; set FREQID_OPEN_DATA to the folder that holds them")
    return folder
