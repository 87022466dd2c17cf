"""How does a profile become a raw run? It is played, here on the simulated rig, and both streams are kept.

Every run draws its random numbers from one seed, which the run notes, so that it can be repeated.
"""

from __future__ import annotations

import secrets
from dataclasses import replace

import numpy as np

from excitation.hdf5_file import file_sha256
from excitation.profile import Profile
from excitation.profile_file import read_profile
from freqid.capture.simulated_rig import simulate_run
from freqid.errors import RigSheetError
from freqid.records import Origin, Run, RunKind
from freqid.rig import Rig, read_rig
from freqid.run_file import read_run, write_run
from freqid.stages import Progress, silent
from freqid.stages.planned_rig import check_against_limits
from freqid.test_folder import TestFolder

__all__ = ["capture_simulated", "check_simulated", "folder_profile", "scaled"]


def capture_simulated(
    folder: TestFolder,
    *,
    kind: RunKind = "response",
    level: float = 1.0,
    seed: int | None = None,
    progress: Progress = silent,
) -> Run:
    """Play the profile of this kind on the rig of [simulated] and keep the run in runs/.

    Parameters
    ----------
    level
        The voltage is played at so many times its departure from the bias.
    seed
        Of the noise, the lost frames and the jitter; drawn and noted in the run where None.

    Raises
    ------
    TestFolderError
        There is no profile of this kind (with the command that makes it).
    RigSheetError
        rig.toml is faulty, or neither [simulated] nor [step_test] describes the rig.
    excitation.LimitExceeded
        The profile breaks a limit of the rig sheet as it is now.
    """
    rig = read_rig(folder.rig)
    profile = scaled(folder_profile(folder, kind), level)
    check_against_limits(profile, rig)
    check_simulated(folder, rig)
    seed = secrets.randbits(32) if seed is None else seed
    progress("simulating the rig")
    recorded = simulate_run(
        profile, rig, kind=kind, name=folder.next_run_name(kind), rng=np.random.default_rng(seed)
    )
    run = replace(
        recorded,
        origins=(_profile_origin(folder, kind), Origin(source="simulated rig", sha256=None, content="angle")),
        notes=(*recorded.notes, *_level_note(profile, level), f"simulated with seed {seed}"),
    )
    return read_run(write_run(folder, run))


def folder_profile(folder: TestFolder, kind: RunKind) -> Profile:
    """The profile that runs of this kind are driven with; raises TestFolderError where there is none."""
    path = folder.profile(kind)
    if not path.exists():
        raise folder.missing(path)
    return read_profile(path)


def scaled(profile: Profile, level: float) -> Profile:
    """The profile with its departure from the bias times `level`."""
    return replace(profile, voltage=profile.bias + level * (profile.voltage - profile.bias)) if level != 1 else profile


def _level_note(profile: Profile, level: float) -> tuple[str, ...]:
    if level == 1:
        return ()
    return (f"played at {level:g} times the designed voltage, at most {profile.peak_voltage:.4g} V from the bias",)


def _profile_origin(folder: TestFolder, kind: RunKind) -> Origin:
    path = folder.profile(kind)
    return Origin(source=folder.relative_name(path), sha256=file_sha256(path), content="voltage as sent")


def check_simulated(folder: TestFolder, rig: Rig) -> None:
    """Raise RigSheetError where the sheet does not describe a rig that could be simulated."""
    for name in ("gain", "natural_frequency", "damping_ratio", "delay"):
        if getattr(rig.simulated, name) is None:
            raise RigSheetError(
                f"{folder.rig}: [simulated] {name} is missing and [step_test] has none either; give it in one of them"
            )
