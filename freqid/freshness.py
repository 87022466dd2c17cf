"""Does a file still belong to the files it was made from?

Every result names the sha256 of its sources (`computed_from`). A source that has changed, or has gone, makes it out of
date. Names are relative to the test folder; what lies outside it (the logs of another instrument) is not looked at.
"""

from __future__ import annotations

import html
import json
import re
from collections.abc import Mapping
from pathlib import Path

from freqid.errors import TestFolderError
from freqid.test_folder import TestFolder

__all__ = ["changed_sources", "sources_of"]

_IN_PAGE = re.compile(r'<meta name="freqid-computed-from" content="([^"]*)">')


def sources_of(folder: TestFolder, path: Path) -> dict[str, str]:
    """Name and sha256 of each file that `path` (a JSON result, or report.html) says it was made from.

    Raises TestFolderError where the file is missing or damaged.
    """
    if path.suffix == ".html":
        found = _IN_PAGE.search(path.read_text(encoding="utf-8", errors="replace"))
        content = {} if found is None else json.loads(html.unescape(found[1]))
    else:
        written = folder.read_json(path)
        content = written.get("computed_from", written.get("sources", {}))  # a profile calls them sources
    if not isinstance(content, Mapping):
        raise TestFolderError(f"{path}: damaged (computed_from is no table); delete it and make it again")
    return {str(name): str(sha256) for name, sha256 in content.items()}


def changed_sources(folder: TestFolder, path: Path) -> tuple[str, ...]:
    """Which of the files that `path` was made from, and that are still there, are no longer the same."""
    from excitation.hdf5_file import file_sha256

    changed: list[str] = []
    for name, sha256 in sources_of(folder, path).items():
        source = folder.path / name
        if source.is_file() and file_sha256(source) != sha256:
            changed.append(name)
    return tuple(changed)
