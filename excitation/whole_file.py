"""How does a file appear whole or not at all? It is written under a temporary name beside it, then renamed."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

__all__ = ["taking_the_place_of"]


@contextmanager
def taking_the_place_of(path: Path) -> Iterator[str]:
    """An empty temporary file beside `path` that becomes it when the block ends, and vanishes when it fails.

    Raises
    ------
    OSError
        The folder is missing, or the file may not be replaced. Nothing is left behind.
    """
    if not path.parent.is_dir():
        raise FileNotFoundError(f"{path}: the folder {path.parent} does not exist; create it first")
    handle, temporary = tempfile.mkstemp(prefix=f".{path.stem}-", suffix=".tmp", dir=path.parent)
    os.close(handle)
    try:
        yield temporary
        os.chmod(temporary, 0o666 & ~_umask())
        os.replace(temporary, path)
    finally:
        Path(temporary).unlink(missing_ok=True)


def _umask() -> int:
    """The permissions the user withholds from new files (a temporary file has none for others at all)."""
    mask = os.umask(0)
    os.umask(mask)
    return mask
