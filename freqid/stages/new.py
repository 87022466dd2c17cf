"""How does a test begin? With a folder that holds a commented rig sheet."""

from __future__ import annotations

from pathlib import Path

from freqid.errors import TestFolderError
from freqid.rig_template import rig_sheet_text
from freqid.test_folder import TestFolder, write_text

__all__ = ["create_folder"]


def create_folder(path: Path | str) -> TestFolder:
    """Make the folder `path` (and those above it) and write rig.toml into it; other files there stay.

    Raises
    ------
    TestFolderError
        There is a rig sheet already, or `path` is a file. Nothing is changed then.
    OSError
        The folder cannot be made or written; a folder made in vain is removed again.
    """
    folder = TestFolder(path)
    if folder.rig.exists():
        raise TestFolderError(f"{folder.rig}: exists already and is left as it is; edit it, or name another folder")
    if folder.path.exists() and not folder.path.is_dir():
        raise TestFolderError(f"{folder.path}: a file of this name is in the way; name another folder")
    is_new = not folder.path.exists()
    try:
        write_text(folder.rig, rig_sheet_text())
    finally:
        if is_new and folder.path.is_dir() and not folder.rig.exists():
            folder.path.rmdir()
    return folder
