"""How do the frames get onto the disk as they come, so that whatever happens they can be read?

An append-only file beside the runs: a magic line, then entries of one byte of kind, four of length, four of CRC-32
(ISO 3309, as zlib has it), then the content. The first entry is the heading (JSON: all that is needed to make the run
of it), blocks of frames follow (`freqid.capture.sound.messages`), and events (JSON). Every entry is handed to
the operating system at once and forced onto the medium every second, so a killed process loses nothing and a lost
supply a second. Reading ends at the first entry that is cut short or does not fit its CRC.

The file is locked for as long as its recorder lives: a journal that can be locked has been left behind.
"""

from __future__ import annotations

import json
import os
import struct
import sys
import threading
import zlib
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, BinaryIO

from freqid.capture.sound.messages import Block, unpack_block

__all__ = ["Journal", "is_being_written", "journal_paths", "read_journal", "room_beside"]

MAGIC = b"freqid journal 1\n"
HEADING, BLOCK_ENTRY, EVENT = b"H", b"B", b"E"
FORCE_EVERY = 1.0  # s
_ENTRY = struct.Struct("<cII")
_LOCKED_BYTE = 1 << 40  # far beyond the content: a lock there keeps nobody from reading


class Journal:
    """A journal being written. Raises OSError where the disk is full; what was whole before stays whole."""

    def __init__(self, path: Path, heading: Mapping[str, Any]) -> None:
        self.path = path
        self._file = open(path, "xb", buffering=0)  # noqa: SIM115 - closed by `close`
        if not _lock(self._file):
            raise OSError(f"{path}: another recorder holds this journal")
        self._closing = threading.Event()
        self._write(MAGIC)
        self._append(HEADING, _text(heading))
        self._forcing = threading.Thread(target=self._force, daemon=True)
        self._forcing.start()

    def append_block(self, content: bytes) -> None:
        """Keep a block as `pack_block` made it."""
        self._append(BLOCK_ENTRY, content)

    def append_event(self, event: Mapping[str, Any]) -> None:
        """Keep what happened."""
        self._append(EVENT, _text(event))

    def close(self) -> None:
        """Force everything onto the medium and let go of the file."""
        if not self._file.closed:
            self._closing.set()
            self._forcing.join()
            os.fsync(self._file.fileno())
            self._file.close()

    def _append(self, kind: bytes, content: bytes) -> None:
        self._write(_ENTRY.pack(kind, len(content), zlib.crc32(content)) + content)

    def _write(self, content: bytes) -> None:
        before = self._file.tell()
        rest = memoryview(content)
        try:
            while rest:
                rest = rest[self._file.write(rest) :]
        except OSError:
            self._file.truncate(before)
            self._file.seek(before)
            raise

    def _force(self) -> None:
        while not self._closing.wait(FORCE_EVERY):
            try:
                os.fsync(self._file.fileno())
            except (OSError, ValueError):
                return  # the next write says what is wrong


def read_journal(path: Path) -> Iterator[dict[str, Any] | Block]:
    """The heading, then blocks and events in their order, as far as the file is whole; nothing where it is no journal.

    Raises OSError where the file cannot be read.
    """
    with open(path, "rb") as file:
        if file.read(len(MAGIC)) != MAGIC:
            return
        while (entry := _next_entry(file)) is not None:
            kind, content = entry
            yield unpack_block(content) if kind == BLOCK_ENTRY else json.loads(content)


def journal_paths(runs: Path) -> list[Path]:
    """All journals in the folder of runs, oldest name first."""
    return sorted(runs.glob(".*.journal"))


def is_being_written(path: Path) -> bool:
    """Whether the recorder of this journal is alive."""
    try:
        with open(path, "r+b") as file:
            return not _lock(file)
    except OSError:
        return True


def room_beside(path: Path) -> int:
    """Bytes free where `path` is or will be."""
    import shutil

    return shutil.disk_usage(path.parent).free


def _next_entry(file: BinaryIO) -> tuple[bytes, bytes] | None:
    head = file.read(_ENTRY.size)
    if len(head) < _ENTRY.size:
        return None
    kind, length, checksum = _ENTRY.unpack(head)
    if kind not in (HEADING, BLOCK_ENTRY, EVENT):
        return None
    content = file.read(length)
    return (kind, content) if len(content) == length and zlib.crc32(content) == checksum else None


def _text(content: Mapping[str, Any]) -> bytes:
    return json.dumps(content, ensure_ascii=False, allow_nan=False).encode()


def _lock(file: Any) -> bool:
    """Whether the file could be locked; the lock ends with the process, however it ends."""
    if sys.platform == "win32":
        import msvcrt

        position = file.tell()
        try:
            file.seek(_LOCKED_BYTE)
            msvcrt.locking(file.fileno(), msvcrt.LK_NBLCK, 1)
        except OSError:
            return False
        finally:
            file.seek(position)
        return True
    import fcntl

    try:
        fcntl.flock(file.fileno(), fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        return False
    return True
