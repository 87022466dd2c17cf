"""The journal: what was appended is read back, whatever became of its end; its lock tells whether somebody writes."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from freqid.capture.sound.journal import MAGIC, Journal, is_being_written, read_journal
from freqid.capture.sound.messages import Block, pack_block, unpack_block

HEADING = {"name": "response-001", "unit": "°"}


def block(first: int, n: int = 50) -> Block:
    """Frames that can be told apart."""
    frames = (first + np.arange(3 * n, dtype=np.float32)).reshape(n, 3)
    return Block(first_frame=first, flags=first % 3, frames=frames)


def written(path: Path, n_blocks: int = 4) -> bytes:
    """The bytes of a journal with so many blocks and an end."""
    journal = Journal(path, HEADING)
    for number in range(n_blocks):
        journal.append_block(pack_block(block(50 * number)))
    journal.append_event({"end": None})
    journal.close()
    return path.read_bytes()


def test_block_survives_packing() -> None:
    """Number of the first frame, flags and every float to the last bit."""
    again = unpack_block(pack_block(block(7)))
    assert (again.first_frame, again.flags) == (7, 1) and np.array_equal(again.frames, block(7).frames)
    with pytest.raises(ValueError, match="holds 149 numbers"):
        unpack_block(pack_block(block(7))[:-4])


def test_whole_journal_is_read_in_order(tmp_path: Path) -> None:
    """Heading, blocks, event."""
    written(tmp_path / "j")
    heading, *blocks, event = list(read_journal(tmp_path / "j"))
    assert heading == HEADING and event == {"end": None}
    assert [entry.first_frame for entry in blocks if isinstance(entry, Block)] == [0, 50, 100, 150]


def test_cut_anywhere_it_is_read_up_to_there(tmp_path: Path) -> None:
    """Every length from nothing to all: never an error, never a block that is not whole."""
    content = written(tmp_path / "whole")
    size = len(pack_block(block(0))) + 9
    begin = content.index(pack_block(block(0))) - 9
    for length in range(0, len(content), 7):
        (tmp_path / "cut").write_bytes(content[:length])
        blocks = [entry for entry in read_journal(tmp_path / "cut") if isinstance(entry, Block)]
        assert len(blocks) == min(4, max(0, (length - begin) // size))


def test_damaged_entry_ends_the_reading(tmp_path: Path) -> None:
    """One flipped bit in the second block: the first is read, nothing after it."""
    content = bytearray(written(tmp_path / "whole"))
    content[content.index(pack_block(block(50))) + 40] ^= 1
    (tmp_path / "bad").write_bytes(content)
    entries = list(read_journal(tmp_path / "bad"))
    assert [entry.first_frame for entry in entries if isinstance(entry, Block)] == [0]


@pytest.mark.parametrize("content", [b"", b"freqid", MAGIC, b"\x89HDF\r\n\x1a\n" + bytes(200), MAGIC + bytes(500)])
def test_what_is_no_journal_holds_nothing(content: bytes, tmp_path: Path) -> None:
    """Another file, zeros after a lost supply, an empty one."""
    (tmp_path / "j").write_bytes(content)
    assert list(read_journal(tmp_path / "j")) == []


def test_lock_lives_as_long_as_its_writer(tmp_path: Path) -> None:
    """Seen from another process: held while the journal is open, free when it is closed."""
    program = (
        "import sys; from pathlib import Path; from freqid.capture.sound.journal import is_being_written;"
        "print(is_being_written(Path(sys.argv[1])))"
    )

    def seen() -> str:
        command = [sys.executable, "-c", program, str(tmp_path / "j")]
        return subprocess.run(command, capture_output=True, text=True, check=True).stdout.strip()

    journal = Journal(tmp_path / "j", HEADING)
    assert seen() == "True"
    journal.close()
    assert seen() == "False" and not is_being_written(tmp_path / "j")


def test_journal_is_never_overwritten(tmp_path: Path) -> None:
    """A second one of the same name is refused."""
    written(tmp_path / "j")
    with pytest.raises(FileExistsError):
        Journal(tmp_path / "j", HEADING)


def test_full_disk_leaves_what_was_whole(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A write that fails half-way is taken back, so that later entries can still be read."""
    journal = Journal(tmp_path / "j", HEADING)
    journal.append_block(pack_block(block(0)))

    class Full:
        """A file that takes ten bytes more."""

        def __init__(self, file: object) -> None:
            self.file, self.room = file, 10

        def write(self, content: bytes) -> int:
            if self.room <= 0:
                raise OSError(28, "No space left on device")
            taken = min(len(content), self.room)
            self.room -= taken
            return int(self.file.write(content[:taken]))  # type: ignore[attr-defined]

        def __getattr__(self, name: str) -> object:
            return getattr(self.file, name)

    real = journal._file
    monkeypatch.setattr(journal, "_file", Full(real))
    with pytest.raises(OSError, match="No space left"):
        journal.append_block(pack_block(block(50)))
    monkeypatch.setattr(journal, "_file", real)
    journal.append_event({"end": "disk"})
    journal.close()
    heading, first, event = list(read_journal(tmp_path / "j"))
    assert heading == HEADING and isinstance(first, Block) and event == {"end": "disk"}
