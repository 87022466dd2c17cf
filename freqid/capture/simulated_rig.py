"""What would the rig and its sensor have recorded? A rig in software, exact in continuous time.

The voltage is the profile, held as a staircase or joined as a smooth signal. The angle follows the
second-order equation without time-stepping error (`freqid.held_response`), or with the faults planted in it
(`planted_faults`), is averaged over each exposure, and is stamped by the sensor's own clock: a stamp s belongs to the
true time

    t = clock_offset + clock_ratio * s

A wrong time base plays the voltage too slowly; on a common clock the stamps are wrong by as much. Frames jitter (the
stamp tells by how much), get lost, carry noise and are quantised. Everything random comes from `rng`, so a seed repeats
a run to the last bit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np

from freqid.capture.planted_faults import NO_FAULTS, PlantedFaults, angle_with_faults
from freqid.errors import RigSheetError
from freqid.held_response import Drive
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

    `faults` are planted in every run, or in those of the kind `faults_in` only. Time is that of the voltage. Angles
    are in `angle_unit`, noise and quantisation too.
    """

    model: SecondOrder
    sensor: SimulatedSensor
    angle_unit: str = "deg"
    rest_angle: float = 0.0
    faults: PlantedFaults = NO_FAULTS
    faults_in: Literal["both", "response", "step"] = "both"

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
            faults=_faults_of_sheet(rig),
            faults_in=s.faults_in,
        )

    def run(self, drive: InputStream, *, kind: RunKind, name: str, rng: np.random.Generator) -> Run:
        """Drive the rig with `drive` and record it.

        The sensor starts at its stamp 0 and goes on for half a second after the voltage ends.
        """
        sensor = self.sensor
        faults = self.faults if self.faults_in in ("both", kind) else NO_FAULTS
        played, sensor = _on_time_base(drive, sensor, 1 + faults.time_base_ppm * 1e-6)
        stop = float(played.time[-1]) + 0.5
        n = int(np.floor((stop - sensor.clock_offset) / sensor.clock_ratio * sensor.sample_rate)) + 1
        stamps = np.arange(max(n, 1)) / sensor.sample_rate
        stamps = stamps + sensor.jitter * rng.standard_normal(len(stamps))
        kept = rng.random(len(stamps)) >= sensor.lost_frames
        stamps = np.sort(stamps[kept])
        end_of_exposure = stamps + STAMP_TO_EXPOSURE_END[sensor.stamp] * sensor.exposure
        true_time = sensor.clock_offset + sensor.clock_ratio * end_of_exposure
        planted = replace(self, faults=faults)
        angle = planted.angle(played, true_time, exposure=sensor.exposure * sensor.clock_ratio)
        angle = angle + sensor.noise * rng.standard_normal(len(angle))
        if sensor.quantisation > 0:
            angle = sensor.quantisation * np.round(angle / sensor.quantisation)
        if faults.silent_losses:
            stamps, angle = _losing_silently(stamps, angle, faults.silent_losses, 1 / sensor.sample_rate, rng)
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
        return self.rest_angle + angle_with_faults(held, self.model, self.faults, exposure_end, exposure=exposure)


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


def _faults_of_sheet(rig: Rig) -> PlantedFaults:
    """The planted faults of [simulated]; a key that is off in the sheet is infinite or zero here."""
    s = rig.simulated
    return PlantedFaults(
        dry_friction=s.dry_friction,
        static_friction=s.static_friction,
        backlash=s.backlash,
        spring_hardening=s.spring_hardening,
        spring_asymmetry=s.spring_asymmetry,
        spring_angle=rig.limits.angle,
        end_stop=math.inf if s.end_stop is None else s.end_stop,
        restitution=s.restitution,
        saturation=math.inf if s.saturation is None else s.saturation,
        gain_asymmetry=s.gain_asymmetry,
        slew_limit=math.inf if s.slew_limit is None else s.slew_limit,
        driver_pole=math.inf if s.driver_pole is None else s.driver_pole,
        second_mode_frequency=math.inf if s.second_mode_frequency is None else s.second_mode_frequency,
        second_mode_gain=0.0 if s.second_mode_frequency is None else s.second_mode_gain,
        second_mode_damping=s.second_mode_damping,
        sensor_pole=math.inf if s.sensor_pole is None else s.sensor_pole,
        hidden_exposure=s.hidden_exposure,
        drift=s.drift,
        voltage_scale=s.voltage_scale,
        angle_scale=s.angle_scale,
        time_base_ppm=s.time_base_ppm,
        silent_losses=round(s.silent_losses),
    )


def _on_time_base(drive: InputStream, sensor: SimulatedSensor, stretch: float) -> tuple[InputStream, SimulatedSensor]:
    """The voltage as it is truly played, and what the sensor's clock is then; nothing changes for 1."""
    if stretch == 1:
        return drive, sensor
    played = replace(drive, time=drive.time[0] + (drive.time - drive.time[0]) * stretch)
    return played, replace(sensor, clock_ratio=sensor.clock_ratio * stretch) if sensor.common_clock else sensor


def _losing_silently(
    stamps: np.ndarray, angle: np.ndarray, n: int, interval: float, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Without `n` frames; the stamps that follow close up."""
    n = min(n, len(stamps) - 2)
    lost = np.sort(rng.choice(np.arange(1, len(stamps) - 1), n, replace=False))
    late = np.searchsorted(lost, np.arange(len(stamps)), side="left") * interval
    return np.delete(stamps - late, lost), np.delete(angle, lost)
