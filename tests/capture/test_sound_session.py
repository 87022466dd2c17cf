"""The whole machinery, process, pipe, journal, guard, verification, with the simulated interface and planted faults."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sound_vane import RATE, vane_on_sound

from excitation.profile_file import read_profile
from freqid.capture.sound.folding import FoldedRun
from freqid.capture.sound.journal import journal_paths
from freqid.capture.sound.simulated_interface import SimulatedFaults
from freqid.errors import CaptureError, FreqidError
from freqid.run_file import read_run
from freqid.stages.estimate import choose_runs
from freqid.stages.sound_capture import Live, SoundChannels, SoundSettings, capture_through_sound_interface
from freqid.test_folder import TestFolder

SIMULATED = SoundChannels(device="simulated")
ROUND_TRIP = 80 + 100  # frames of the simulated interface: its line of 20 ms, and a block of a fortieth of a second
Play = Callable[..., list[FoldedRun]]


@pytest.fixture(scope="module")
def designed(tmp_path_factory: pytest.TempPathFactory) -> TestFolder:
    """A folder with a profile, to be copied."""
    return vane_on_sound(tmp_path_factory.mktemp("sound"))


@pytest.fixture
def folder(designed: TestFolder, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> TestFolder:
    """A copy; the simulated interface runs as fast as it can."""
    monkeypatch.setenv("FREQID_SIMULATED_PACE", "fast")
    copy = TestFolder(tmp_path / designed.path.name)
    shutil.copytree(designed.path, copy.path)
    return copy


@pytest.fixture
def play(folder: TestFolder) -> Play:
    """Capture with settings and faults; gives the runs that were finished, also where it raises `failed`."""

    def capture(*, failed: str | None = None, faults: SimulatedFaults | None = None, **words: Any) -> list[FoldedRun]:
        runs: list[FoldedRun] = []
        states: list[Live] = []
        channels = words.pop("channels", SIMULATED)
        settings = SoundSettings(channels=channels, seed=1, faults=faults or SimulatedFaults(), **words)

        def run() -> None:
            capture_through_sound_interface(
                folder, settings, consent=lambda ready: None, live=states.append, finished=runs.append
            )

        if failed is None:
            run()
        else:
            with pytest.raises(CaptureError, match=failed):
                run()
        assert journal_paths(folder.runs) == [] and not list(folder.runs.glob(".*"))
        return runs

    return capture


def test_complete_run_is_verified_and_holds_what_was_sent(folder: TestFolder, play: Play) -> None:
    """The loopback is the profile one round trip later; the run is read-only, on one clock, from -0.25 s on."""
    (folded,) = play()
    run = read_run(folded.path)
    profile = read_profile(folder.profile_h5)
    assert folded.verified.problems == () and run.complete and run.common_clock and not run.input.commanded
    assert folded.path.stat().st_mode & 0o222 == 0
    # one round trip is whole frames: the fit of the delay is exact but for float32 digits (1e-7 over a slope of 1e-3)
    assert folded.verified.delay == pytest.approx(ROUND_TRIP, abs=1e-3)
    begin = round(0.25 * RATE) + ROUND_TRIP
    recorded = run.input.voltage[begin : begin + profile.voltage.size]
    # float32 twice: 2^-24 of 10 V each
    assert np.max(np.abs(recorded - profile.voltage[: recorded.size])) <= 2 * 10 * 2.0**-24
    assert run.input.time[0] == -0.25 and run.input.time[round(0.25 * RATE)] == 0.0
    periodicity = run.input.periodicity
    assert periodicity is not None and periodicity.n_periods == profile.n_periods
    assert periodicity.start == pytest.approx((profile.steady_start + ROUND_TRIP) / RATE, abs=1e-6)


def test_without_loopback_the_voltage_is_the_one_sent(folder: TestFolder, play: Play) -> None:
    """The commanded voltage in place of the recorded one, and the notes say what that means."""
    (folded,) = play(channels=SoundChannels(device="simulated", loopback="none"))
    run = read_run(folded.path)
    profile = read_profile(folder.profile_h5)
    assert run.input.commanded and folded.verified.delay is None
    begin = round(0.25 * RATE)
    sent = run.input.voltage[begin : begin + profile.voltage.size]
    assert np.max(np.abs(sent - profile.voltage)) <= 10 * 2.0**-24
    assert any("includes the interface's round trip" in note for note in run.notes)


def test_levels_and_runs_are_files_of_their_own(folder: TestFolder, play: Play) -> None:
    """Each level so many times, the amplitude noted and played."""
    runs = play(levels=(0.5,), runs=2)
    assert [folded.run.name for folded in runs] == ["response-001", "response-002"]
    peak = read_profile(folder.profile_h5).peak_voltage
    for folded in runs:
        # float32 keeps 24 bits
        assert max(map(abs, folded.voltage)) == pytest.approx(peak / 2, rel=2.0**-22)
        assert any("played at 0.5 times the designed voltage" in note for note in folded.run.notes)


def test_level_beyond_a_limit_is_refused_before_anything_sounds(folder: TestFolder, play: Play) -> None:
    """One level too high refuses them all."""
    from excitation.errors import LimitExceeded

    with pytest.raises(LimitExceeded, match=r"swing|voltage"):
        play(levels=(0.5, 2.0))
    assert not folder.runs.exists()


def test_periods_repeat_the_steady_part(folder: TestFolder, play: Play) -> None:
    """So many periods as asked for, each the same."""
    profile = read_profile(folder.profile_h5)
    assert profile.period_samples is not None
    (folded,) = play(periods=5, levels=(0.9,))  # the steady swing may be a little larger than the designed one
    run = read_run(folded.path)
    assert run.input.periodicity is not None and run.input.periodicity.n_periods == 5
    begin = round((run.input.periodicity.start + 0.25) * RATE)
    steady = run.input.voltage[begin : begin + 5 * profile.period_samples].reshape(5, -1)
    assert np.array_equal(steady[0], steady[4])
    assert np.ptp(steady[0]) > 1


@pytest.mark.parametrize(
    ("faults", "expected"),
    [
        ({"loses_at": 3.0, "silent_loss": 1}, "not verified: the delay of the loopback is off by"),
        ({"loses_at": 3.0, "flagged_loss": 1}, "not verified: input overflow at"),
        ({"loses_at": 4.0, "silent_loss": 1500}, "guard: loopback departs|not verified: the"),
        ({"loopback_off_at": 4.0}, "guard: loopback departs from the voltage sent|not verified: the loopback differs"),
        ({"stops_at": 3.0}, "the sound interface stopped delivering data"),
    ],
)
def test_fault_is_told_and_the_run_marked(
    faults: dict[str, Any], expected: str, folder: TestFolder, play: Play
) -> None:
    """What was recorded is a readable run, incomplete, with the reason; `estimate` does not take it unless named."""
    (folded,) = play(failed=expected, faults=SimulatedFaults(**faults))
    run = read_run(folded.path)
    assert not run.complete and any(note.startswith("incomplete: ") for note in run.notes)
    assert run.angle.angle.size == folded.samples > RATE
    with pytest.raises(FreqidError, match="no response run is complete"):
        choose_runs(folder, "response", None)
    assert choose_runs(folder, "response", folded.run.name)[0].name == folded.run.name


def test_first_blocks_may_be_lost(play: Play) -> None:
    """A loss within the pre-roll shifts everything alike and is none."""
    (folded,) = play(faults=SimulatedFaults(loses_at=0.3, flagged_loss=512))
    assert folded.verified.problems == ()
    assert folded.verified.delay == pytest.approx(ROUND_TRIP + 512, abs=1e-3)


def test_guard_ends_the_test_before_the_stops(folder: TestFolder, play: Play) -> None:
    """With a rig of three times the gain the angle passes the share: ramp, rest, reason."""
    text = folder.rig.read_text(encoding="utf-8")
    folder.rig.write_text(text.replace("gain = 12.1", "gain = 36.0"), encoding="utf-8")
    (folded,) = play(failed="guard: angle .* from rest, 28.5 is the most allowed")
    run = read_run(folded.path)
    assert abs(run.input.voltage[-1]) <= 10 * 2.0**-23
    steps = np.abs(np.diff(run.input.voltage))
    assert np.max(steps) <= np.max(np.abs(np.diff(read_profile(folder.profile_h5).voltage))) + 1e-5


@pytest.mark.parametrize("kind", ["callback-exception", "stall"])
def test_fault_in_the_streams_own_thread_ends_in_a_ramp(
    kind: str, play: Play, monkeypatch: pytest.MonkeyPatch
) -> None:
    """An exception where the blocks are exchanged is told; a stall of a software interface loses nothing."""
    monkeypatch.setenv("FREQID_PLANT_FAULT", f"{kind}@2.0")
    if kind == "stall":
        assert play()[0].verified.problems == ()
        return
    (folded,) = play(failed="fault in the stream: RuntimeError: planted callback-exception; kept 2")
    assert np.isfinite(read_run(folded.path).input.voltage).all()
