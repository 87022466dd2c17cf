"""What would the rig and its sensor have recorded? A rig in software, exact in continuous time.

The voltage is the profile, held as a staircase or joined as a smooth signal. The angle follows the
second-order equation without time-stepping error (`freqid.held_response`), is averaged over each
exposure, and is stamped by the sensor's own clock: a stamp s belongs to the true time

    t = clock_offset + clock_ratio * s

Frames jitter (the stamp tells by how much), get lost, carry noise and are quantised. Everything random
comes from `rng`, so a seed repeats a run to the last bit.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from freqid.errors import RigSheetError
from freqid.held_response import Drive, HeldResponse
from freqid.quantity import in_unit
from freqid.records import AngleStream, InputStream, Origin, Periodicity, Run, RunKind, Stamp
from freqid.second_order import SecondOrder

if TYPE_CHECKING:
    from excitation import Profile
    from freqid.rig import Rig

__all__ = ["SimulatedRig", "SimulatedSensor", "input_from_profile", "simulate_run"]

SMOOTH_REFINEMENT = 8
STAMP_TO_EXPOSURE_END = {"start": 1.0, "middle": 0.5, "end": 0.0}


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulatedSensor:
    """The angle sensor and its clock; `lost_frames` is the expected fraction of frames lost."""

    sample_rate: float = in_unit("Hz")
    exposure: float = in_unit("s")
    stamp: Stamp = "end"
    noise: float = 0.0
    quantisation: float = 0.0
    jitter: float = 0.0
    lost_frames: float = 0.0
    common_clock: bool = False
    clock_ratio: float = 1.0
    clock_offset: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulatedRig:
    """A second-order rig with its sensor. `rest_angle` is the reading at the operating point.

    Time is that of the voltage. Angles are in `angle_unit`, noise and quantisation too.
    """

    model: SecondOrder
    sensor: SimulatedSensor
    angle_unit: str = "deg"
    rest_angle: float = 0.0

    @classmethod
    def from_sheet(cls, rig: Rig) -> SimulatedRig:
        """The rig described by `[simulated]` and `[angle_sensor]` of a rig sheet."""
        s = rig.simulated
        if s.gain is None or s.natural_frequency is None or s.damping_ratio is None or s.delay is None or (
            s.noise is None
        ):
            raise RigSheetError("[simulated]: gain, natural_frequency, damping_ratio, delay and noise are needed; "
                                "give them")
        return cls(
            model=SecondOrder(
                gain=s.gain, natural_frequency=s.natural_frequency, damping_ratio=s.damping_ratio, delay=s.delay
            ),
            sensor=SimulatedSensor(
                sample_rate=rig.angle_sensor.sample_rate,
                exposure=rig.angle_sensor.exposure,
                stamp=rig.angle_sensor.stamp,
                noise=s.noise,
                quantisation=s.quantisation,
                jitter=s.jitter,
                lost_frames=s.lost_frames,
                common_clock=s.common_clock,
                clock_ratio=1.0 if s.common_clock else 1 + s.clock_ratio_ppm * 1e-6,
                clock_offset=0.0 if s.common_clock else s.clock_offset,
            ),
            angle_unit=rig.rig.angle_unit,
        )

    def run(self, drive: InputStream, *, kind: RunKind, name: str, rng: np.random.Generator) -> Run:
        """Drive the rig with `drive` and record it.

        The sensor starts at its stamp 0 and goes on for half a second after the voltage ends.
        """
        sensor = self.sensor
        stop = float(drive.time[-1]) + 0.5
        n = int(np.floor((stop - sensor.clock_offset) / sensor.clock_ratio * sensor.sample_rate)) + 1
        stamps = np.arange(max(n, 1)) / sensor.sample_rate
        stamps = stamps + sensor.jitter * rng.standard_normal(len(stamps))
        kept = rng.random(len(stamps)) >= sensor.lost_frames
        stamps = np.sort(stamps[kept])
        end_of_exposure = stamps + STAMP_TO_EXPOSURE_END[sensor.stamp] * sensor.exposure
        true_time = sensor.clock_offset + sensor.clock_ratio * end_of_exposure
        angle = self.angle(drive, true_time, exposure=sensor.exposure * sensor.clock_ratio)
        angle = angle + sensor.noise * rng.standard_normal(len(angle))
        if sensor.quantisation > 0:
            angle = sensor.quantisation * np.round(angle / sensor.quantisation)
        return Run(
            name=name,
            kind=kind,
            input=drive,
            angle=AngleStream(
                time=stamps, angle=angle, angle_unit=self.angle_unit, exposure=sensor.exposure, stamp=sensor.stamp
            ),
            common_clock=sensor.common_clock,
            origins=(Origin(source="simulated rig", sha256=None, content="input and angle"),),
            simulated=True,
        )

    def angle(self, drive: InputStream, exposure_end: np.ndarray, *, exposure: float) -> np.ndarray:
        """Noise-free angle (N,) averaged over exposures that end at the true instants `exposure_end` (N,) s."""
        start, interval = float(drive.time[0]), float(drive.time[1] - drive.time[0])
        if drive.hold == "smooth":
            held = Drive.through_smooth_samples(drive.voltage, start=start, interval=interval, refine=SMOOTH_REFINEMENT)
        else:
            held = Drive.from_samples(drive.voltage, start=start, interval=interval, smooth=False)
        m = self.model
        response = HeldResponse(held, m.natural_frequency, m.damping_ratio)
        return self.rest_angle + m.gain * response.mean(exposure_end - m.delay, exposure)


def input_from_profile(profile: Profile) -> InputStream:
    """The commanded voltage of a profile as an input stream that starts at t = 0."""
    periodicity = None
    if profile.period_samples:
        rate = profile.sample_rate
        periodicity = Periodicity(
            period=profile.period_samples / rate,
            lines=np.asarray(profile.lines),
            start=profile.steady_start / rate,
            stop=profile.steady_stop / rate,
        )
    return InputStream(
        time=np.arange(len(profile.voltage)) / profile.sample_rate,
        voltage=np.asarray(profile.voltage),
        hold=profile.hold,
        commanded=True,
        periodicity=periodicity,
    )


def simulate_run(profile: Profile, rig: Rig, *, kind: RunKind, name: str, rng: np.random.Generator) -> Run:
    """Play `profile` on the simulated rig of the rig sheet and record it."""
    return SimulatedRig.from_sheet(rig).run(input_from_profile(profile), kind=kind, name=name, rng=rng)
