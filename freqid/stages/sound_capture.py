"""How does a profile become raw runs through a sound interface? Checked, agreed to, played, recorded, verified.

Everything that can be refused is refused before anything sounds: the sheet, the profile at every level against the
limits, the device, its channels and its rate, the room on the disk.
"""

from __future__ import annotations

import math
import secrets
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from excitation.hdf5_file import file_sha256
from excitation.profile import Profile
from freqid.capture.sound.folding import FoldedRun
from freqid.capture.sound.session import Live, Recording, record
from freqid.capture.sound.simulated_interface import SimulatedFaults
from freqid.errors import CaptureError
from freqid.records import RunKind
from freqid.rig import Rig
from freqid.stages.capture import folder_profile, scaled
from freqid.stages.planned_rig import check_against_limits, expected_rig
from freqid.stages.sound_recording import SoundChannels, checked_rig, plant_of, recording_of
from freqid.test_folder import TestFolder

__all__ = [
    "Live",
    "SoundChannels",
    "SoundSettings",
    "capture_through_sound_interface",
]

BUILD_UP = 10.0  # time constants after which a periodic swing does not grow any more


@dataclass(frozen=True, slots=True, kw_only=True)
class SoundSettings:
    """What is to be played how often: `runs` times at each of `levels` (times the designed voltage).

    `guard` is the share of the way to the stops that the angle may use; `periods`, where given, how often a periodic
    profile's steady part is played. `faults` are planted in the simulated rig.
    """

    kind: RunKind = "response"
    channels: SoundChannels = SoundChannels()
    guard: float = 0.95
    runs: int = 1
    levels: tuple[float, ...] = (1.0,)
    periods: int | None = None
    seed: int | None = None
    faults: SimulatedFaults = SimulatedFaults()


def capture_through_sound_interface(
    folder: TestFolder,
    settings: SoundSettings,
    *,
    consent: Callable[[dict[str, Any]], None],
    live: Callable[[Live], None],
    finished: Callable[[FoldedRun], None],
) -> None:
    """Play the profile of the folder and keep every run in runs/.

    Parameters
    ----------
    consent
        Called once, with the device and the channels, before anything sounds; raises to refuse.
    live
        Called some ten times a second with how the test stands.
    finished
        Called with every run that stands, also with one that is incomplete.

    Raises
    ------
    CaptureError
        The device refuses; or a run ended early or did not verify, and what was kept of it.
    RigSheetError, TestFolderError, excitation.ExcitationError
        Sheet, profile or limits do not allow it.
    OSError
        There is no room on the disk.
    """
    rig = checked_rig(folder, simulated=settings.channels.simulated)
    profile = folder_profile(folder, settings.kind)
    _check_profile(folder, profile, rig, settings)
    profiles = [(level, scaled(profile, level)) for level in settings.levels]
    for _, played in profiles:
        check_against_limits(_built_up(played, rig, settings.periods), rig)
    asked = False

    def consent_once(ready: dict[str, Any]) -> None:
        nonlocal asked
        if not asked:
            consent(ready)
        asked = True

    for level, played in profiles:
        for _ in range(settings.runs):
            recording = _recording(folder, rig, played, settings, level)
            folded = record(folder, recording, consent=consent_once, live=live)
            finished(folded)
            if folded.reason is not None:
                raise CaptureError(_kept(folder, folded))


def _recording(
    folder: TestFolder, rig: Rig, profile: Profile, settings: SoundSettings, level: float
) -> Recording:
    path = folder.profile(settings.kind)
    heading: dict[str, Any] = {
        "kind": settings.kind,
        "level": level,
        "periodicity": _periodicity(profile),
        "profile": {
            "source": folder.relative_name(path), "sha256": file_sha256(path), "content": "voltage as sent"
        },
    }  # fmt: skip
    recording = recording_of(rig, profile, channels=settings.channels, guard=settings.guard, heading=heading)
    if settings.periods is not None:
        loop = {"loop_start": profile.steady_start, "loop_stop": profile.steady_start + (profile.period_samples or 0)}
        recording = replace(recording, samples=_one_period(recording.samples, profile), plan=replace(
            recording.plan, **loop, n_loops=settings.periods, n_samples=_one_period(profile.voltage, profile).size
        ))  # fmt: skip
        recording.heading["periodicity"]["stop"] = recording.heading["periodicity"]["start"] + (
            recording.heading["periodicity"]["period"]
        )
    if settings.channels.simulated:
        seed = secrets.randbits(32) if settings.seed is None else settings.seed
        recording.order["simulated"] = plant_of(rig, seed=seed, faults=settings.faults)
    return recording


def _one_period(samples: Any, profile: Profile) -> Any:
    """The samples with a single period in place of the steady part."""
    begin = profile.steady_start + (profile.period_samples or 0)
    return np.concatenate([samples[:begin], samples[profile.steady_stop :]])


def _check_profile(folder: TestFolder, profile: Profile, rig: Rig, settings: SoundSettings) -> None:
    path = folder.profile(settings.kind)
    again = f"design it again with `freqid excite {folder.quoted}{' --kind step' if settings.kind == 'step' else ''}`"
    if profile.hold != "smooth":
        raise CaptureError(f"{path}: was designed for a staircase ({profile.hold}), the sheet says smooth; {again}")
    if profile.sample_rate != rig.output.sample_rate:
        raise CaptureError(
            f"{path}: was designed for {profile.sample_rate:g} Hz, [output] sample_rate is"
            f" {rig.output.sample_rate:g} Hz; {again}"
        )
    if abs(profile.bias - rig.limits.bias) > 1e-6 * rig.output.full_scale:
        raise CaptureError(
            f"{path}: was designed about {profile.bias:g} V, [limits] bias is {rig.limits.bias:g} V; {again}"
        )
    if settings.periods is not None and profile.period_samples is None:
        raise CaptureError(f"{path}: is not periodic, so --periods {settings.periods} means nothing; leave it out")


def _built_up(profile: Profile, rig: Rig, periods: int | None) -> Profile:
    """The profile with as many periods as it takes for the swing not to grow any more, or as will be played."""
    if periods is None or profile.period_samples is None:
        return profile
    model = expected_rig(rig)
    slowest = 0.0 if model is None else model.slowest_decay
    period = profile.period_samples / profile.sample_rate
    n = min(periods, max(profile.n_periods, math.ceil(BUILD_UP * slowest / period)))
    start, stop = profile.steady_start, profile.steady_start + profile.period_samples
    voltage = np.concatenate(
        [profile.voltage[:start], np.tile(profile.voltage[start:stop], n), profile.voltage[profile.steady_stop :]]
    )
    return replace(profile, voltage=voltage, steady_stop=start + n * profile.period_samples)


def _periodicity(profile: Profile) -> dict[str, Any] | None:
    if profile.period_samples is None:
        return None
    rate = profile.sample_rate
    return {
        "period": profile.period_samples / rate,
        "lines": profile.lines.tolist(),
        "start": profile.steady_start / rate,
        "stop": profile.steady_stop / rate,
    }


def _kept(folder: TestFolder, folded: FoldedRun) -> str:
    where = folder.relative_name(folded.path)
    marked = "marked incomplete: `estimate` uses it only where it is named"
    return f"{folded.reason}; kept {folded.played:.1f} s of the profile as {where}, {marked}"
