"""One recording from the word to go to the run in its file: whatever ends it, the rig comes to rest and the data stay.

The order of things: files and room, the stream's process, its answer (nothing has sounded yet), consent, the stream,
the journal's end, the run.
"""

from __future__ import annotations

import errno
from collections.abc import Callable
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Any

from freqid.capture.sound.folding import FoldedRun, fold_journal
from freqid.capture.sound.guard import GuardLimits
from freqid.capture.sound.interface import Float32s
from freqid.capture.sound.journal import Journal
from freqid.capture.sound.playback import PlaybackPlan
from freqid.capture.sound.recording_files import RecordingFiles, prepared_files
from freqid.capture.sound.stop_requests import StopRequests, listening_for_stop_requests
from freqid.capture.sound.stream_link import Follower, Outcome, StreamLink
from freqid.errors import CaptureError, TestFolderError

if TYPE_CHECKING:
    from freqid.test_folder import TestFolder

__all__ = ["Live", "Recording", "record"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Live:
    """How a running test stands: s left, largest voltage (V) of the last moment, angle from rest now and at most."""

    left: float
    fraction: float
    peak_voltage: float
    angle: float
    largest_angle: float
    angle_limit: float
    clipped: int
    flagged: int


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Recording:
    """Everything one recording needs. `heading` is what the journal begins with, without device and channels."""

    samples: Float32s
    plan: PlaybackPlan
    guard: GuardLimits
    order: dict[str, Any]
    heading: dict[str, Any]
    watch_loopback: bool = True


def record(
    folder: TestFolder,
    recording: Recording,
    *,
    consent: Callable[[dict[str, Any]], None],
    live: Callable[[Live], None],
) -> FoldedRun:
    """Play and record once.

    Parameters
    ----------
    consent
        Called with the device's answer before anything sounds; raises to refuse.
    live
        Called some ten times a second while the stream runs.

    Raises
    ------
    CaptureError
        The device refuses, or nothing of the profile was played.
    OSError
        There is no room.
    """
    files = RecordingFiles.of_next_run(folder, recording.heading["kind"])
    with StreamLink(recording.order) as link:
        answer = link.answer()
        consent(answer["ready"])
        with (
            prepared_files(files, recording.samples, recording.plan.n_frames),
            listening_for_stop_requests() as requests,
        ):
            journal = Journal(files.journal, _heading(recording, files, answer))
            try:
                reason = _stream(link, recording, files, journal, requests, live)
            finally:
                _close(journal)
            files.release_room()
            return _folded(folder, files, reason)


def _heading(recording: Recording, files: RecordingFiles, answer: dict[str, Any]) -> dict[str, Any]:
    ready = answer["ready"]
    measured = ready["channels"]["loopback"] is not None
    return {
        **recording.heading,
        "name": files.name,
        "created": datetime.now(UTC).isoformat(timespec="milliseconds"),
        "device": _device_words(ready),
        "channels": ready["channels"],
        "playback": recording.plan.as_json(),
        "loopback_full_scale": recording.guard.loopback_full_scale if measured else None,
        "angle_full_scale": recording.guard.angle_full_scale,
        "angle_unit": recording.guard.angle_unit,
        "largest_departure": recording.guard.largest_departure,
        "stream_process": answer["pid"],
    }


def _device_words(ready: dict[str, Any]) -> str:
    output, input = ready["output"], ready["input"]
    name = f"{output['name']} ({output['host']})"
    return name if output["number"] == input["number"] else f"{name} out, {input['name']} ({input['host']}) in"


def _stream(
    link: StreamLink,
    recording: Recording,
    files: RecordingFiles,
    journal: Journal,
    requests: StopRequests,
    live: Callable[[Live], None],
) -> str | None:
    keeper = _Keeper(journal, recording, live)
    link.play(
        {
            "playback": recording.plan.as_json(),
            "guard": asdict(recording.guard),
            "drive_file": str(files.drive.resolve()),
            "watch_loopback": recording.watch_loopback,
        }
    )
    outcome: Outcome = link.follow(
        Follower(block=keeper.block, beat=keeper.beat, wants_stop=lambda: keeper.fault or requests.reason)
    )
    keeper.event({"end": outcome.reason})
    return outcome.reason


class _Keeper:
    """Keeps blocks in the journal and tells how the test stands; a full disk stops the test."""

    def __init__(self, journal: Journal, recording: Recording, live: Callable[[Live], None]) -> None:
        self._journal, self._recording, self._live = journal, recording, live
        self._flagged = 0
        self.fault: str | None = None

    def block(self, content: bytes) -> None:
        """The next block."""
        if self.fault is None:
            self._try(lambda: self._journal.append_block(content))

    def event(self, event: dict[str, Any]) -> None:
        """An event."""
        self._try(lambda: self._journal.append_event(event))

    def beat(self, beat: dict[str, Any]) -> None:
        """A heartbeat."""
        plan, guard = self._recording.plan, self._recording.guard
        done = min(beat["beat"], plan.n_frames)
        state = Live(
            left=(plan.n_frames - done) / plan.sample_rate,
            fraction=done / plan.n_frames,
            peak_voltage=beat["peak"] * plan.full_scale,
            angle=beat["angle"],
            largest_angle=beat["largest_angle"],
            angle_limit=guard.angle,
            clipped=beat["clipped"],
            flagged=beat["flagged"],
        )
        try:
            self._live(state)
        except OSError:
            self._live = _nobody  # the terminal is closed

    def _try(self, keep: Callable[[], None]) -> None:
        try:
            keep()
        except OSError as error:
            full = error.errno == errno.ENOSPC
            remedy = "make room before the next run" if full else "check the disk before the next run"
            self.fault = self.fault or f"disk: {error.strerror or error}; {remedy}"


def _nobody(_: Live) -> None:
    """Nobody looks any more."""


def _close(journal: Journal) -> None:
    try:
        journal.close()
    except OSError:
        return  # what is whole in it is what there is


def _folded(folder: TestFolder, files: RecordingFiles, reason: str | None) -> FoldedRun:
    try:
        folded = fold_journal(folder, files.journal, unless_told=reason)
    except TestFolderError:
        files.remove()
        raise CaptureError(
            f"{reason or 'the stream ended before the profile began'}; nothing of the profile had been recorded"
        ) from None
    except OSError as error:
        raise CaptureError(
            f"{reason or 'recorded'}; {error.strerror or error}: the recording waits in {files.journal.name}, make room"
            f" and run `freqid capture {folder.quoted}` again to recover it"
        ) from None
    files.remove()
    return folded
