"""What does an import need to know beside the logs? The user's choices, and the facts of the rig.

Everything left at None is read from the logs, then from the rig sheet; what was decided, and why, is told
in the run's notes.
"""

from __future__ import annotations

from dataclasses import dataclass

from freqid.capture.logs.text_cells import Decimal
from freqid.errors import LogError
from freqid.quantity import in_unit
from freqid.records import Hold, RunKind, Stamp

__all__ = ["ImportSettings", "RigFacts"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ImportSettings:
    """The user's choices for one import.

    The columns are header names or numbers counted from 1. `time_unit` is one of s, ms, us, min;
    `exposure` (s) is that of the angle samples, the rig sheet's unless given; `sample_rate` (Hz) is for logs without
    times and for frame numbers; `angle_unit` is deg or rad. The
    three `input_...` choices are for an input log of its own that differs from the angle log.
    """

    kind: RunKind = "response"
    time_column: str | None = None
    input_column: str | None = None
    angle_column: str | None = None
    time_unit: str | None = None
    sample_rate: float | None = None
    angle_unit: str | None = None
    hold: Hold | None = None
    exposure: float | None = None
    decimal: Decimal | None = None
    input_time_column: str | None = None
    input_time_unit: str | None = None
    input_sample_rate: float | None = None

    def __post_init__(self) -> None:
        for option, rate in (("sample-rate", self.sample_rate), ("input-sample-rate", self.input_sample_rate)):
            if rate is not None and not 0 < rate < float("inf"):
                raise LogError(f"--{option} {rate:g} is no rate; give samples per second, above zero")
        if self.exposure is not None and not 0 <= self.exposure < float("inf"):
            raise LogError(f"--exposure {self.exposure:g} is no exposure; give seconds, 0 for readings of an instant")


@dataclass(frozen=True, slots=True, kw_only=True)
class RigFacts:
    """What the rig sheet says that an import needs.

    WAV samples (digital full scale = 1) become volts by `output_full_scale` and angles by `angle_full_scale`.
    """

    angle_unit: str
    angle_sample_rate: float = in_unit("Hz")
    exposure: float = in_unit("s")
    stamp: Stamp
    output_sample_rate: float = in_unit("Hz")
    output_hold: Hold
    output_full_scale: float = in_unit("V")
    angle_full_scale: float = in_unit("angle_unit")
