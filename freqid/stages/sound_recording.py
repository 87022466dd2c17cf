"""What does a recording through a sound interface need, from rig sheet, profile and channels?

The sheet must describe a sound interface: a smooth output, the angle sensor on a converter of the same rate.
"""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass
from typing import Any, Literal

import numpy as np

from excitation.profile import Profile
from freqid.capture.sound.guard import GuardLimits
from freqid.capture.sound.playback import PRE_ROLL, PlaybackPlan, digital_samples
from freqid.capture.sound.session import Recording
from freqid.capture.sound.simulated_interface import DEVICE_NAME, SimulatedFaults, SimulatedPlant
from freqid.errors import RigSheetError
from freqid.rig import Rig, read_rig
from freqid.stages.capture import check_simulated
from freqid.stages.planned_rig import expected_rig, limits_of
from freqid.test_folder import TestFolder

__all__ = ["SoundChannels", "checked_rig", "plant_of", "recording_of"]

SETTLING = 5.0  # time constants at a bias before the profile begins
LONGEST_PRE_ROLL = 30.0  # s
GROUPS_OF_PERIOD, LEAST_GUARD_RATE = 60.0, 1000.0  # Hz


@dataclass(frozen=True, slots=True, kw_only=True)
class SoundChannels:
    """Device and channels, counted from 1; what is None is chosen as usual (`device_choice`)."""

    device: str | None = None
    input_device: str | None = None
    drive: int = 1
    loopback: int | Literal["none"] | None = None
    angle: int | None = None

    @property
    def simulated(self) -> bool:
        """Whether the rig of [simulated] is meant."""
        return self.device == DEVICE_NAME


def checked_rig(folder: TestFolder, *, simulated: bool) -> Rig:
    """The rig sheet, fit for a sound interface.

    Raises
    ------
    RigSheetError
        A key does not fit, with the value it needs.
    """
    rig = read_rig(folder.rig)
    wrong = None
    if rig.output.hold != "smooth":
        wrong = f'[output] hold = "{rig.output.hold}": a sound interface gives a smooth signal; write hold = "smooth"'
    elif rig.angle_sensor.full_scale is None:
        wrong = "[angle_sensor] full_scale is missing: give the angle at the digital full scale of the input"
    elif rig.angle_sensor.sample_rate != rig.output.sample_rate:
        wrong = (
            f"[angle_sensor] sample_rate = {rig.angle_sensor.sample_rate:g}: a sound interface records at the rate it"
            f" plays; write sample_rate = {rig.output.sample_rate:.10g} and exposure = 0.0"
        )
    elif rig.angle_sensor.exposure != 0:
        wrong = (
            f"[angle_sensor] exposure = {rig.angle_sensor.exposure:g}: a converter takes the angle at an instant; write"
            " exposure = 0.0"
        )
    if wrong is not None:
        raise RigSheetError(f"{folder.rig}: {wrong}, and design the profile again with `freqid excite {folder.quoted}`")
    if simulated:
        check_simulated(folder, rig)
    return rig


def recording_of(
    rig: Rig, profile: Profile, *, channels: SoundChannels, guard: float, heading: dict[str, Any]
) -> Recording:
    """A recording of the profile on the rig, played once through."""
    largest_departure = profile.peak_voltage
    limit = limits_of(rig).voltage
    plan = PlaybackPlan(
        sample_rate=profile.sample_rate,
        full_scale=rig.output.full_scale,
        bias=profile.bias,
        voltage_limit=limit,
        slew_rate=rig.limits.slew_rate,
        largest_step=profile.max_slew_rate / profile.sample_rate,
        n_samples=profile.voltage.size,
        pre_roll=_pre_roll(rig, profile.bias),
    )
    return Recording(
        samples=digital_samples(profile.voltage, full_scale=rig.output.full_scale, voltage_limit=limit),
        plan=plan,
        guard=GuardLimits(
            sample_rate=profile.sample_rate,
            pre_roll_frames=plan.pre_roll_frames,
            angle=guard * rig.limits.angle,
            angle_unit=rig.angle_unit,
            angle_full_scale=rig.angle_sensor.full_scale or math.nan,
            voltage=limit,
            loopback_full_scale=rig.output.loopback_full_scale or rig.output.full_scale,
            output_full_scale=rig.output.full_scale,
            largest_departure=largest_departure,
            thinning=_thinning(profile),
        ),
        order={
            "what": "capture",
            "device": channels.device,
            "input_device": channels.input_device,
            "drive": channels.drive,
            "loopback": channels.loopback,
            "angle": channels.angle,
            "sample_rate": profile.sample_rate,
        },
        heading={"simulated": channels.simulated, "level": 1.0, "periodicity": None, **heading},
    )


def plant_of(rig: Rig, *, seed: int, faults: SimulatedFaults) -> dict[str, Any]:
    """The simulated rig behind the simulated interface, for the order."""
    known = rig.simulated
    return asdict(
        SimulatedPlant(
            gain=known.gain or math.nan,
            natural_frequency=known.natural_frequency or math.nan,
            damping_ratio=known.damping_ratio or math.nan,
            delay=known.delay or 0.0,
            noise=known.noise or 0.0,
            output_full_scale=rig.output.full_scale,
            loopback_full_scale=rig.output.loopback_full_scale or rig.output.full_scale,
            angle_full_scale=rig.angle_sensor.full_scale or math.nan,
            seed=seed,
            faults=faults,
        )
    )


def _thinning(profile: Profile) -> int:
    """Frames over which the voltage hardly changes: a small part of the period of its mean frequency."""
    departure = profile.voltage - profile.bias
    size = float(np.sqrt(np.mean(departure**2)))
    if size == 0:
        return 1
    frequency = float(np.sqrt(np.mean(np.diff(departure) ** 2))) / size * profile.sample_rate / (2 * math.pi)
    return max(1, int(profile.sample_rate / max(GROUPS_OF_PERIOD * frequency, LEAST_GUARD_RATE)))


def _pre_roll(rig: Rig, bias: float) -> float:
    """A rig with a bias has to settle there first."""
    model = expected_rig(rig)
    if not bias or model is None:
        return PRE_ROLL
    return min(LONGEST_PRE_ROLL, max(PRE_ROLL, SETTLING * model.slowest_decay))
