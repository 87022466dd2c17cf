"""What did a recording leave behind that was cut off, and what can be made of it?

A journal whose recorder lives is left alone. Any other becomes a run, marked incomplete with the reason. One whose run
stands already (the recorder ended between writing the run and removing the journal) is removed.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from freqid.capture.sound.folding import FoldedRun, fold_journal
from freqid.capture.sound.journal import is_being_written, journal_paths, read_journal
from freqid.capture.sound.recording_files import RecordingFiles
from freqid.errors import TestFolderError
from freqid.run_file import read_run_facts

if TYPE_CHECKING:
    from freqid.test_folder import TestFolder

__all__ = ["Recovered", "recover_recordings"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Recovered:
    """What became of a journal: the run, or None where nothing could be made of it; `message` says it in a sentence."""

    name: str
    folded: FoldedRun | None
    message: str


def recover_recordings(folder: TestFolder) -> tuple[Recovered, ...]:
    """Fold every journal that was left behind; empty where there is none."""
    journals = journal_paths(folder.runs) if folder.runs.is_dir() else []
    return tuple(_recovered(folder, RecordingFiles.of_journal(path)) for path in journals if not is_being_written(path))


def _recovered(folder: TestFolder, files: RecordingFiles) -> Recovered:
    files.release_room()
    if _stands(folder, files):
        files.remove()
        return Recovered(name=files.name, folded=None, message=f"{files.name}: its recording was complete; tidied up")
    try:
        folded = fold_journal(folder, files.journal)
    except TestFolderError as error:
        files.remove()
        return Recovered(name=files.name, folded=None, message=f"recording {files.name} was cut off: {error}; removed")
    except OSError as error:
        reason = error.strerror or str(error)
        return Recovered(
            name=files.name,
            folded=None,
            message=f"recording {files.name} was cut off and cannot be recovered yet ({reason}); make room, then again",
        )
    files.remove()
    return Recovered(
        name=files.name,
        folded=folded,
        message=(
            f"recovered {folded.run.name}: {folded.played:.1f} s of the profile,"
            f" {'complete' if folded.reason is None else f'incomplete: {folded.reason}'}"
        ),
    )


def _stands(folder: TestFolder, files: RecordingFiles) -> bool:
    """Whether the run of this very recording is there: the note says when it was made."""
    path = folder.run(files.name)
    if not path.exists():
        return False
    heading = next(read_journal(files.journal), None)
    created = heading.get("created") if isinstance(heading, dict) else None
    return created is not None and any(f"recorded {created} " in note for note in read_run_facts(path).notes)
