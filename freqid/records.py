"""What did a run record? Two streams, each on its own clock, as they came, and where they came from.

A `Run` is the raw material: nothing in it has been shifted, resampled or cleaned. How the voltage
behaves between its samples (`hold`) and what the angle stamp means (`exposure`, `stamp`) are facts
of the hardware that recorded it, so they travel with the run.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from freqid.quantity import in_unit

__all__ = ["AngleStream", "Hold", "InputStream", "Origin", "Periodicity", "Run", "RunKind", "Stamp"]

Hold = Literal["zero-order", "smooth"]
Stamp = Literal["start", "middle", "end"]
RunKind = Literal["response", "step"]
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Periodicity:
    """What is known of a periodic excitation: its period, its excited lines, its steady part.

    The voltage repeats with `period` from `start` to `stop` (input clock); outside that it ramps or rests.
    """

    period: float = in_unit("s")
    lines: Floats = in_unit("Hz")  # (F,), excited frequencies, ascending
    start: float = in_unit("s")
    stop: float = in_unit("s")

    @property
    def n_periods(self) -> int:
        """Whole periods in the steady part."""
        return int((self.stop - self.start) / self.period + 1e-6)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class InputStream:
    """The voltage on the clock of its own recorder or converter.

    `hold` is "zero-order" where the samples are a staircase (each value holds until the next stamp)
    and "smooth" where they sample a smooth signal. `commanded` is true where the voltage is the profile
    that was sent, false where it was measured.
    """

    time: Floats = in_unit("s")  # (M,)
    voltage: Floats = in_unit("V")  # (M,)
    hold: Hold
    commanded: bool
    periodicity: Periodicity | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class AngleStream:
    """The angle on the clock of its own sensor, in the rig's angle unit.

    The sample with stamp s is the mean angle over an exposure of `exposure` seconds, of which s marks
    the start, the middle or the end. NaN marks a frame the tracker could not read.
    """

    time: Floats = in_unit("s")  # (N,)
    angle: Floats = in_unit("angle_unit")  # (N,)
    angle_unit: str
    exposure: float = in_unit("s")
    stamp: Stamp


@dataclass(frozen=True, slots=True, kw_only=True)
class Origin:
    """Where a stream came from: file name, sha256 (None when not from a file), and what was read from it."""

    source: str
    sha256: str | None
    content: str


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Run:
    """One run: both streams as they came, and their origin.

    `common_clock` is true where both streams share one clock (one log, or one converter); then the
    delay is the rig's own. Otherwise the delay contains the unknown offset between the clocks.
    `notes` says in sentences what the import found and did (unit taken from a header, wraps undone).
    `complete` is false for a run that ended early.
    """

    name: str
    kind: RunKind
    input: InputStream
    angle: AngleStream
    common_clock: bool
    origins: tuple[Origin, ...] = ()
    notes: tuple[str, ...] = ()
    complete: bool = True
    simulated: bool = False
    file_sha256: str | None = field(default=None)
