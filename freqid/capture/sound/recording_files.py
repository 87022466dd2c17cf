"""Which files stand beside the runs while one is recorded, and is there room for them?

    .NAME.journal   what was sent and what came in, so far
    .NAME.drive     the samples to send, float32 in digital full scale, as the stream's process reads them
    .NAME.reserve   room kept for the run file, so that a disk that fills up leaves enough to fold the journal

All three go when the run stands. The reserve goes first, for the run to take its place.
"""

from __future__ import annotations

import contextlib
import errno
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

from freqid.capture.sound.folding import bytes_of_run
from freqid.capture.sound.interface import Float32s
from freqid.capture.sound.journal import journal_paths, room_beside

if TYPE_CHECKING:
    from freqid.test_folder import RunKind, TestFolder

__all__ = ["RecordingFiles", "prepared_files"]

BYTES_OF_FRAME_IN_JOURNAL = 12.5  # three float32 and a share of the headings
SPARE = 1 << 20


class RecordingFiles:
    """The names of the files of one recording."""

    def __init__(self, runs: Path, name: str) -> None:
        self.name = name
        self.journal = runs / f".{name}.journal"
        self.drive = runs / f".{name}.drive"
        self.reserve = runs / f".{name}.reserve"

    @classmethod
    def of_next_run(cls, folder: TestFolder, kind: RunKind) -> RecordingFiles:
        """Under a name that neither a run nor a journal has."""
        taken = {path.name.removeprefix(".").removesuffix(".journal") for path in journal_paths(folder.runs)}
        number = int(folder.next_run_name(kind).rpartition("-")[2])
        while f"{kind}-{number:03d}" in taken:
            number += 1
        return cls(folder.runs, f"{kind}-{number:03d}")

    @classmethod
    def of_journal(cls, journal: Path) -> RecordingFiles:
        """Those that belong to a journal."""
        return cls(journal.parent, journal.name.removeprefix(".").removesuffix(".journal"))

    def release_room(self) -> None:
        """Give up the room kept for the run file, and the samples to send."""
        for path in (self.reserve, self.drive):
            with contextlib.suppress(OSError):
                path.unlink(missing_ok=True)

    def remove(self) -> None:
        """Remove all of them; the run stands."""
        self.release_room()
        self.journal.unlink(missing_ok=True)


@contextmanager
def prepared_files(files: RecordingFiles, samples: Float32s, n_frames: int) -> Iterator[None]:
    """Write the samples to send and keep room for the run, for as long as the block runs.

    Raises
    ------
    OSError
        There is not enough room for the recording; the message holds both figures.
    """
    files.journal.parent.mkdir(parents=True, exist_ok=True)
    needed = samples.nbytes + int(BYTES_OF_FRAME_IN_JOURNAL * n_frames) + bytes_of_run(n_frames) + SPARE
    free = room_beside(files.journal)
    if free < needed:
        raise OSError(
            errno.ENOSPC,
            f"disk: {needed / 1e6:.1f} MB are needed for the recording, {free / 1e6:.1f} MB are free",
            str(files.journal.parent),
        )
    try:
        samples.astype("<f4", copy=False).tofile(files.drive)
        _reserve(files.reserve, bytes_of_run(n_frames))
        yield
    finally:
        files.release_room()


def _reserve(path: Path, size: int) -> None:
    with open(path, "wb") as file:
        allocate = getattr(os, "posix_fallocate", None)
        if allocate is None:
            file.truncate(size)  # on Windows that takes the room
            return
        try:
            allocate(file.fileno(), 0, size)
        except OSError as error:
            if error.errno == errno.ENOSPC:
                raise  # others: the file system cannot; then nothing is kept
