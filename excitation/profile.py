"""What voltage is the rig to be driven with?

A `Profile` is the designed voltage itself: one sample after another at one rate, how the voltage
behaves between the samples (`hold`), the operating point it starts from and returns to (`bias`),
and, where it is periodic, which samples repeat and which frequencies (`lines`) they hold.

Sample n belongs to the time n / sample_rate. With hold "zero-order" it stands until the next
sample; with "smooth" the samples are those of a band-limited signal.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any, Literal, get_args

import numpy as np
from numpy.typing import NDArray

from excitation.errors import ExcitationError

__all__ = ["Floats", "Hold", "Kind", "Profile"]

Hold = Literal["zero-order", "smooth"]
Kind = Literal["multisine", "swept-sine", "step", "other"]
Floats = NDArray[np.float64]


def _no_lines() -> Floats:
    return np.empty(0)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Profile:
    """A designed voltage.

    Attributes
    ----------
    voltage : (M,) array
        V, absolute (the bias is in it); read-only.
    sample_rate : float
        Hz.
    hold : "zero-order" or "smooth"
        What happens between the samples.
    bias : float
        V at the operating point.
    kind : "multisine", "swept-sine", "step" or "other"
        "other" is a voltage read from a file that does not say how it was designed.
    period_samples : int or None
        Samples per period of a periodic profile.
    lines : (F,) array
        Hz, the excited frequencies of a periodic profile, ascending; empty otherwise.
    steady_start, steady_stop : int
        The samples [steady_start, steady_stop) repeat with `period_samples`; both 0 when not periodic.
    seed : int or None
        Seed of the random numbers the design used.
    band : (low, high) or None
        Hz, the frequencies the profile was asked to cover.
    settings : mapping
        What else was decided in the design, for the record.

    Raises
    ------
    ExcitationError
        The samples, the rate or the indices cannot be those of a profile.
    """

    voltage: Floats = field(metadata={"unit": "V"})
    sample_rate: float = field(metadata={"unit": "Hz"})
    hold: Hold
    bias: float = field(metadata={"unit": "V"})
    kind: Kind
    period_samples: int | None = None
    lines: Floats = field(default_factory=_no_lines, metadata={"unit": "Hz"})
    steady_start: int = 0
    steady_stop: int = 0
    seed: int | None = None
    band: tuple[float, float] | None = field(default=None, metadata={"unit": "Hz"})
    settings: Mapping[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        for name in ("voltage", "lines"):
            values = np.array(getattr(self, name), dtype=np.float64)
            values.flags.writeable = False
            object.__setattr__(self, name, values)
        object.__setattr__(self, "settings", MappingProxyType(dict(self.settings)))
        self._check_samples()
        self._check_periodicity()

    def _check_samples(self) -> None:
        if self.voltage.ndim != 1 or self.voltage.size < 2:
            raise ExcitationError(f"voltage: needs one row of at least 2 samples, has the shape {self.voltage.shape}")
        if not np.isfinite(self.voltage).all():
            first = int(np.flatnonzero(~np.isfinite(self.voltage))[0])
            raise ExcitationError(f"voltage: sample {first} is {self.voltage[first]}; every sample must be a number")
        if not (np.isfinite(self.sample_rate) and self.sample_rate > 0):
            raise ExcitationError(f"sample_rate: {self.sample_rate} Hz; it must be above 0")
        if not np.isfinite(self.bias):
            raise ExcitationError(f"bias: {self.bias} V; it must be a number")
        if self.hold not in get_args(Hold):
            raise ExcitationError(f"hold: {self.hold!r} is neither 'zero-order' nor 'smooth'")
        if self.kind not in get_args(Kind):
            raise ExcitationError(f"kind: {self.kind!r} is none of {', '.join(get_args(Kind))}")

    def _check_periodicity(self) -> None:
        start, stop, period = self.steady_start, self.steady_stop, self.period_samples
        if not 0 <= start <= stop <= self.voltage.size:
            raise ExcitationError(f"steady part {start} to {stop}: outside the {self.voltage.size} samples")
        if period is None:
            return
        if period < 2 or stop - start < period or (stop - start) % period:
            raise ExcitationError(f"steady part {start} to {stop}: not a whole number of periods of {period} samples")

    @property
    def time(self) -> Floats:
        """Time of each sample in s, (M,), from 0."""
        return np.arange(self.voltage.size) / self.sample_rate

    @property
    def duration(self) -> float:
        """Length in s; the last sample counts in full."""
        return self.voltage.size / self.sample_rate

    @property
    def n_periods(self) -> int:
        """Whole periods in the steady part, 0 when not periodic."""
        return 0 if self.period_samples is None else (self.steady_stop - self.steady_start) // self.period_samples

    @property
    def detection_lines(self) -> tuple[Floats, Floats]:
        """Frequencies in Hz that a distorting rig answers at and the voltage does not hold: (even, odd multiples).

        All multiples of 1/period between the first and the last line that are not excited; empty when not periodic.
        """
        if self.period_samples is None or self.lines.size == 0:
            return _no_lines(), _no_lines()
        spacing = self.sample_rate / self.period_samples
        excited = np.round(self.lines / spacing).astype(np.int64)
        free = np.setdiff1d(np.arange(excited[0], excited[-1]), excited)
        return spacing * free[free % 2 == 0], spacing * free[free % 2 == 1]

    @property
    def peak_voltage(self) -> float:
        """Largest departure from the bias, V."""
        return float(np.max(np.abs(self.voltage - self.bias)))

    @property
    def rms(self) -> float:
        """Root mean square of the departure from the bias, V: over the steady part, or over all when not periodic."""
        return float(np.sqrt(np.mean(self._driven**2)))

    @property
    def crest_factor(self) -> float:
        """Peak over rms of the departure from the bias, over the same samples as `rms`; NaN when nothing is driven."""
        rms = self.rms
        return float(np.max(np.abs(self._driven)) / rms) if rms > 0 else float("nan")

    @property
    def max_slew_rate(self) -> float:
        """Largest change from one sample to the next times the sample rate, V/s; starts from and ends at the bias."""
        return float(np.max(np.abs(self.changes)) * self.sample_rate)

    @property
    def changes(self) -> Floats:
        """Change into each sample, and at last back to the bias, V, (M + 1,)."""
        return np.diff(self.voltage, prepend=self.bias, append=self.bias)

    @property
    def _driven(self) -> Floats:
        part = self.voltage if self.period_samples is None else self.voltage[self.steady_start : self.steady_stop]
        return part - self.bias
