"""How do logs made elsewhere become a raw run? They are read as they are, and what was read is noted.

One log with both columns is on one clock. Two logs, or the profile that was played and an angle log, are on
two clocks whose offset is unknown.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Literal

from excitation.hdf5_file import file_sha256
from freqid.capture.logs.import_settings import ImportSettings, RigFacts
from freqid.capture.logs.run_from_logs import run_from_one_log, run_from_profile, run_from_two_logs
from freqid.errors import RigSheetError
from freqid.records import Run
from freqid.rig import Rig, read_rig
from freqid.run_file import read_run, write_run
from freqid.stages import Progress, silent
from freqid.stages.capture import folder_profile
from freqid.test_folder import TestFolder

__all__ = ["ImportSettings", "OneLog", "TwoLogs", "import_logs", "rig_facts"]


@dataclass(frozen=True, slots=True, kw_only=True)
class OneLog:
    """Voltage and angle in two columns of one file, on one clock."""

    log: Path


@dataclass(frozen=True, slots=True, kw_only=True)
class TwoLogs:
    """The voltage in one file ("profile": as it was played), the angle in another, each on its own clock."""

    input: Path | Literal["profile"]
    angle: Path


def import_logs(
    folder: TestFolder, sources: OneLog | TwoLogs, *, settings: ImportSettings, progress: Progress = silent
) -> Run:
    """Read the logs and keep them as a new run in runs/.

    Parameters
    ----------
    settings
        The kind of run, the columns, units and rates; what is None is taken from the log or the rig sheet.

    Raises
    ------
    LogError
        A log cannot be read, or its columns, units or times cannot be told (with the option to give).
    RigSheetError, TestFolderError
        rig.toml is faulty; the profile that was played is not there.
    """
    rig = read_rig(folder.rig)
    _check_full_scale(folder, rig, sources.log if isinstance(sources, OneLog) else sources.angle)
    facts = rig_facts(rig)
    progress("reading the logs")
    run = replace(_run(folder, sources, settings, facts), name=folder.next_run_name(settings.kind))
    return read_run(write_run(folder, run))


def rig_facts(rig: Rig) -> RigFacts:
    """What the import needs to know of the rig; NaN for a digital full scale that the sheet does not give."""
    full_scale = rig.angle_sensor.full_scale
    return RigFacts(
        angle_unit=rig.angle_unit,
        angle_sample_rate=rig.angle_sensor.sample_rate,
        exposure=rig.angle_sensor.exposure,
        stamp=rig.angle_sensor.stamp,
        output_sample_rate=rig.output.sample_rate,
        output_hold=rig.output.hold,
        output_full_scale=rig.output.full_scale,
        angle_full_scale=math.nan if full_scale is None else full_scale,
    )


def _check_full_scale(folder: TestFolder, rig: Rig, angle: Path) -> None:
    if rig.angle_sensor.full_scale is None and angle.suffix.lower() == ".wav":
        raise RigSheetError(
            f"{folder.rig}: [angle_sensor] full_scale is missing, and {angle.name} counts in it; give the angle at"
            " digital full scale"
        )


def _run(folder: TestFolder, sources: OneLog | TwoLogs, settings: ImportSettings, facts: RigFacts) -> Run:
    if isinstance(sources, OneLog):
        return run_from_one_log(sources.log, settings=settings, rig=facts)
    if sources.input == "profile":
        return run_from_profile(
            folder_profile(folder, settings.kind),
            sources.angle,
            settings=settings,
            rig=facts,
            profile_sha256=file_sha256(folder.profile(settings.kind)),
        )
    return run_from_two_logs(Path(sources.input), sources.angle, settings=settings, rig=facts)
