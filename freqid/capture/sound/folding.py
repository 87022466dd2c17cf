"""How does a journal become the run? Verified chunk by chunk, then written chunk by chunk, never held whole.

The run begins a quarter of a second before the first sample of the profile, which is its t = 0, and ends with the
stream. With a loopback its voltage is the recorded one, so the interface's own response and its round trip divide out;
without one it is the voltage as sent, and the delay of the rig will include the round trip.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from freqid.capture.sound.journal import read_journal
from freqid.capture.sound.messages import Block
from freqid.capture.sound.playback import PlaybackPlan
from freqid.capture.sound.verification import GAIN_WITHIN, Verification, Verified
from freqid.errors import TestFolderError
from freqid.records import AngleStream, InputStream, Origin, Periodicity, Run
from freqid.run_file import EvenRate, read_run_facts, write_run_in_blocks

if TYPE_CHECKING:
    from freqid.test_folder import TestFolder

__all__ = ["LEAD", "FoldedRun", "bytes_of_run", "fold_journal"]

LEAD = 0.25  # s of the pre-roll that stay in the run
CUT_OFF = "the recording process was ended"
BYTES_OF_FRAME, BYTES_OF_FACTS = 8, 1 << 20


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FoldedRun:
    """A run that stands in its file: its facts without samples, seconds of the profile played, what was found.

    `voltage` and `angle` are the smallest and the largest values in V and in the rig's angle unit.
    """

    run: Run
    path: Path
    samples: int
    sample_rate: float
    played: float
    voltage: tuple[float, float]
    angle: tuple[float, float]
    verified: Verified
    reason: str | None


def bytes_of_run(n_frames: int) -> int:
    """Room that the run file of so many frames needs."""
    return n_frames * BYTES_OF_FRAME + BYTES_OF_FACTS


def fold_journal(folder: TestFolder, journal: Path, *, unless_told: str | None = CUT_OFF) -> FoldedRun:
    """Write the run that the journal holds, under its own name or the next one that is free.

    `unless_told` is why it ended, where the journal itself does not say.

    Raises
    ------
    TestFolderError
        The journal holds no run: it is damaged at its beginning, or ended before the profile began.
    OSError
        There is no room for the run; the journal stays.
    """
    heading, ending, verified = _first_pass(journal, unless_told)
    plan = PlaybackPlan(**heading["playback"])
    first = plan.pre_roll_frames - round(LEAD * plan.sample_rate)
    samples = verified.frames - first
    if samples < 2:
        raise TestFolderError(f"{journal}: ended before the profile began; nothing can be made of it")
    reason = ending if ending is not None else _unverified(verified)
    rate = EvenRate(sample_rate=plan.sample_rate, start=-round(LEAD * plan.sample_rate) / plan.sample_rate)
    facts = _facts(heading, plan, verified, reason)
    if folder.run(facts.name).exists():
        facts = replace(facts, name=folder.next_run_name(facts.kind))
    ranges = _Ranges()
    path = write_run_in_blocks(
        folder, facts, _written(journal, heading, plan, first, ranges), rate=rate, samples=samples
    )
    return FoldedRun(
        run=read_run_facts(path),
        path=path,
        samples=samples,
        sample_rate=plan.sample_rate,
        played=max(0.0, min(verified.frames - plan.pre_roll_frames, plan.profile_frames) / plan.sample_rate),
        voltage=ranges.of(0),
        angle=ranges.of(1),
        verified=verified,
        reason=reason,
    )


def _first_pass(journal: Path, ending: str | None) -> tuple[dict[str, Any], str | None, Verified]:
    """Heading, reason of an early end, and verification."""
    entries = read_journal(journal)
    heading = next(entries, None)
    if not isinstance(heading, dict) or "playback" not in heading:
        raise TestFolderError(f"{journal}: holds no recording (cut short at its beginning)")
    verification = Verification(
        PlaybackPlan(**heading["playback"]),
        loopback_full_scale=heading["loopback_full_scale"],
        largest_departure=heading["largest_departure"],
    )
    for entry in entries:
        if isinstance(entry, Block):
            verification.take(entry)
        elif "end" in entry:
            ending = entry["end"]
    return heading, ending, verification.result(played_out=ending is None)


def _unverified(verified: Verified) -> str | None:
    return f"not verified: {'; '.join(verified.problems)}" if verified.problems else None


def _facts(heading: dict[str, Any], plan: PlaybackPlan, verified: Verified, reason: str | None) -> Run:
    measured = heading["loopback_full_scale"] is not None
    return Run(
        name=heading["name"],
        kind=heading["kind"],
        input=InputStream(
            time=np.empty(0),
            voltage=np.empty(0),
            hold="smooth",
            commanded=not measured,
            periodicity=_periodicity(heading, plan, verified.delay or 0.0, verified.frames),
        ),
        angle=AngleStream(
            time=np.empty(0), angle=np.empty(0), angle_unit=heading["angle_unit"], exposure=0.0, stamp="end"
        ),
        common_clock=True,
        origins=(
            Origin(**heading["profile"]),
            Origin(source=heading["device"], sha256=None, content="voltage and angle" if measured else "angle"),
        ),
        notes=tuple(_notes(heading, plan, verified, reason)),
        complete=reason is None,
        simulated=heading["simulated"],
    )


def _notes(heading: dict[str, Any], plan: PlaybackPlan, verified: Verified, reason: str | None) -> Iterator[str]:
    channels = heading["channels"]
    yield (
        f"recorded {heading['created']} through {heading['device']} at {plan.sample_rate:g} Hz: drive on output"
        f" {channels['drive']}, angle on input {channels['angle']}, "
        + (f"loopback on input {channels['loopback']}" if channels["loopback"] else "no loopback")
    )
    if heading["level"] != 1:
        peak = heading["largest_departure"]
        yield f"played at {heading['level']:g} times the designed voltage, at most {peak:.4g} V from the bias"
    if verified.delay is not None and verified.gain is not None:
        yield (
            f"loopback: {verified.gain:.4f} times the voltage sent, {verified.delay:.2f} frames"
            f" ({1e3 * verified.delay / plan.sample_rate:.3f} ms) later; the recorded voltage is the input, so this"
            " round trip is not in the rig's delay"
        )
        if abs(verified.gain - 1) > GAIN_WITHIN:
            yield (
                f"the loopback's scale is off by {100 * (verified.gain - 1):.1f} % from the output's: calibrate both"
                " with --calibrate, or the gain of the rig is off as much"
            )
    elif channels["loopback"] is None:
        yield (
            "no loopback: the voltage is the one that was sent, the delay of the rig includes the interface's round"
            " trip, and frames lost silently would not show"
        )
    if reason is not None:
        yield f"incomplete: {reason}"
        if reason != _unverified(verified):
            yield from (f"found: {problem}" for problem in verified.problems)


def _periodicity(
    heading: dict[str, Any], plan: PlaybackPlan, delay: float, n_frames: int
) -> Periodicity | None:
    """The whole periods that were recorded."""
    known = heading["periodicity"]
    if known is None:
        return None
    start = known["start"] + delay / plan.sample_rate
    designed = (known["stop"] - known["start"] + (plan.profile_frames - plan.n_samples) / plan.sample_rate) / (
        known["period"]
    )
    recorded = ((n_frames - plan.pre_roll_frames) / plan.sample_rate - start) / known["period"]
    whole = int(min(designed, recorded) + 1e-6)
    if whole < 1:
        return None
    return Periodicity(
        period=known["period"], lines=np.asarray(known["lines"]), start=start, stop=start + whole * known["period"]
    )


class _Ranges:
    """Smallest and largest value of voltage and angle as they pass."""

    def __init__(self) -> None:
        self._low, self._high = [np.inf, np.inf], [-np.inf, -np.inf]

    def take(self, number: int, values: NDArray[np.float32]) -> None:
        self._low[number] = min(self._low[number], float(np.min(values)))
        self._high[number] = max(self._high[number], float(np.max(values)))

    def of(self, number: int) -> tuple[float, float]:
        return self._low[number], self._high[number]


def _written(
    journal: Path, heading: dict[str, Any], plan: PlaybackPlan, first: int, ranges: _Ranges
) -> Iterator[tuple[NDArray[np.float32], NDArray[np.float32]]]:
    """Voltage in V and angle in the rig's unit, from frame `first` on, some seconds at a time."""
    measured = heading["loopback_full_scale"]
    column, scale = (0, plan.full_scale) if measured is None else (1, measured)
    for frames in _gathered(journal, first, round(4 * plan.sample_rate)):
        voltage = frames[:, column] * np.float32(scale)
        angle = frames[:, 2] * np.float32(heading["angle_full_scale"])
        ranges.take(0, voltage)
        ranges.take(1, angle)
        yield voltage, angle


def _gathered(journal: Path, first: int, at_least: int) -> Iterator[NDArray[np.float32]]:
    waiting: list[NDArray[np.float32]] = []
    n_waiting = 0
    for entry in read_journal(journal):
        if not isinstance(entry, Block):
            continue
        part = entry.frames[max(0, first - entry.first_frame) :]
        if len(part):
            waiting.append(part)
            n_waiting += len(part)
        if n_waiting >= at_least:
            yield np.concatenate(waiting)
            waiting, n_waiting = [], 0
    if waiting:
        yield np.concatenate(waiting)
