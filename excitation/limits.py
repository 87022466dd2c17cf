"""What may the voltage never do?

Three limits of the rig: the voltage itself (absolute, the bias counts), its slew rate, and the stops
of the angle, counted from the operating point. This module checks the first two sample by sample;
the third needs a model of the rig (`excitation.swing`).
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from excitation.errors import ExcitationError, LimitExceeded
from excitation.profile import Profile

__all__ = ["Limits"]


@dataclass(frozen=True, slots=True)
class Limits:
    """Limits of the rig.

    Attributes
    ----------
    voltage : float
        V; no sample is ever larger in magnitude.
    slew_rate : float
        V/s; the change from one sample to the next times the sample rate never exceeds it, however the
        voltage is held in between. Infinity where there is no such limit.
    angle : float
        End stops, from the operating point, in the angle unit of the rig.
    bias : float
        V at the operating point.
    """

    voltage: float = field(metadata={"unit": "V"})
    slew_rate: float = field(metadata={"unit": "V/s"})
    angle: float = field(metadata={"unit": "angle_unit"})
    bias: float = field(default=0.0, metadata={"unit": "V"})

    def __post_init__(self) -> None:
        for name in ("voltage", "slew_rate", "angle"):
            if not getattr(self, name) > 0:
                raise ExcitationError(f"limits: {name} is {getattr(self, name)}; it must be above 0")
        if not abs(self.bias) < self.voltage:
            raise ExcitationError(
                f"limits: the bias of {self.bias:g} V leaves no room within ±{self.voltage:g} V; move the bias"
            )

    def check_profile(self, profile: Profile) -> None:
        """Pass, or refuse with the first sample that breaks the voltage or the slew-rate limit.

        Raises
        ------
        LimitExceeded
            Names the sample, its time, the value and the limit.
        """
        self._check_voltage(profile)
        self._check_slew_rate(profile)

    def _check_voltage(self, profile: Profile) -> None:
        broken = np.flatnonzero(np.abs(profile.voltage) > self.voltage)
        if broken.size:
            first = int(broken[0])
            raise LimitExceeded(
                f"voltage: sample {first} (at {first / profile.sample_rate:.6g} s) is {profile.voltage[first]:.6g} V, "
                f"the limit is ±{self.voltage:.6g} V ({broken.size} of {profile.voltage.size} samples break it); "
                "reduce the amplitude"
            )

    def _check_slew_rate(self, profile: Profile) -> None:
        slew_rate = np.abs(profile.changes) * profile.sample_rate
        broken = np.flatnonzero(slew_rate > self.slew_rate)
        if broken.size:
            first = int(broken[0])
            raise LimitExceeded(
                f"slew rate: into sample {first} (at {first / profile.sample_rate:.6g} s) the voltage changes at "
                f"{slew_rate[first]:.6g} V/s, the limit is {self.slew_rate:.6g} V/s ({broken.size} changes break it); "
                "reduce the amplitude or the upper band edge"
            )
