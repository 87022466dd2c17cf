"""Which faults can be planted in the simulated rig, and what does it then show?

From the voltage to the reading, in this order: the driver (unequal gain, clipping, slew rate, lag, scale), the rig
(dry friction, curved spring, end stops, a second mode beside it), the sensor (play, lag, exposure, scale), the rest
angle (drift). A rig without faults stays exact (`freqid.held_response`).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from freqid.capture.driver_faults import clipped, lagging, slew_limited, unequal
from freqid.capture.motion_path import MotionPath
from freqid.capture.nonlinear_motion import STEP_ANGLE, Nonlinearity, stepped_motion
from freqid.capture.sensor_faults import lagged, linear_path, with_play
from freqid.held_response import Drive, HeldResponse
from freqid.second_order import SecondOrder

__all__ = ["NO_FAULTS", "PlantedFaults", "angle_with_faults"]

Floats = NDArray[np.float64]


def _default(value: float, unit: str) -> Any:
    return field(default=value, metadata={"unit": unit})


@dataclass(frozen=True, slots=True, kw_only=True)
class PlantedFaults:
    """The faults of one run; the defaults are a healthy rig. Angles in the rig's unit, counted from rest.

    `spring_hardening` and `spring_asymmetry` are relative changes of the spring's stiffness (torque over angle) at
    `spring_angle` (the asymmetry: stiffer by it at +, softer by it at - that angle); `backlash` is the whole gap.
    """

    dry_friction: float = _default(0.0, "angle_unit")
    static_friction: float = _default(0.0, "angle_unit")
    backlash: float = _default(0.0, "angle_unit")
    spring_hardening: float = 0.0
    spring_asymmetry: float = 0.0
    spring_angle: float = _default(1.0, "angle_unit")
    end_stop: float = _default(math.inf, "angle_unit")
    restitution: float = 0.5
    saturation: float = _default(math.inf, "V")
    gain_asymmetry: float = 0.0
    slew_limit: float = _default(math.inf, "V/s")
    driver_pole: float = _default(math.inf, "Hz")
    second_mode_frequency: float = _default(math.inf, "Hz")
    second_mode_gain: float = 0.0
    second_mode_damping: float = 0.02
    sensor_pole: float = _default(math.inf, "Hz")
    hidden_exposure: float = _default(0.0, "s")
    drift: float = _default(0.0, "angle_unit")
    voltage_scale: float = 1.0
    angle_scale: float = 1.0
    time_base_ppm: float = _default(0.0, "ppm")
    silent_losses: int = 0

    @property
    def nonlinearity(self) -> Nonlinearity:
        """What of it bends the equation of motion."""
        return Nonlinearity(
            dry_friction=self.dry_friction,
            static_friction=self.static_friction,
            cubic=self.spring_hardening / self.spring_angle**2,
            quadratic=self.spring_asymmetry / self.spring_angle,
            stop=self.end_stop,
            restitution=self.restitution,
        )


NO_FAULTS = PlantedFaults()


def angle_with_faults(
    drive: Drive,
    model: SecondOrder,
    faults: PlantedFaults,
    end: Floats,
    *,
    exposure: float,
    step_angle: float = STEP_ANGLE,
) -> Floats:
    """Noise-free angle (N,) from rest, averaged over exposures that end at the true instants `end` (N,) s.

    Parameters
    ----------
    step_angle
        Longest step of a rig that needs stepping, in radians of its natural frequency.

    Raises
    ------
    CaptureError
        The spring lets the rig run away.
    """
    drive = _driven(drive, faults)
    asked = np.asarray(end, dtype=float) - model.delay
    width = exposure + faults.hidden_exposure
    gain = model.gain * faults.voltage_scale
    span = float(np.ptp(drive.value))
    bent = faults.nonlinearity
    if bent.is_none and faults.backlash == 0 and math.isinf(faults.sensor_pole):
        angle = gain * HeldResponse(drive, model.natural_frequency, model.damping_ratio).mean(asked, width)
        if faults.second_mode_gain and span:
            angle = angle + gain * faults.second_mode_gain * _second(drive, faults).mean(asked, width)
    else:
        path = _path(drive, model, faults, max(float(asked.max(initial=0.0)) - drive.stop, 0.0), step_angle)
        angle = path.mean(asked, width)
    elapsed = np.clip((asked - drive.start) / max(drive.stop - drive.start, drive.interval), 0.0, None)
    return np.asarray(faults.angle_scale * (angle + faults.drift * elapsed))


def _driven(drive: Drive, faults: PlantedFaults) -> Drive:
    if faults.gain_asymmetry:
        drive = unequal(drive, faults.gain_asymmetry)
    if math.isfinite(faults.saturation):
        drive = clipped(drive, faults.saturation)
    if math.isfinite(faults.slew_limit):
        drive = slew_limited(drive, faults.slew_limit)
    if math.isfinite(faults.driver_pole):
        drive = lagging(drive, 1 / (2 * math.pi * faults.driver_pole))
    return drive


def _second(drive: Drive, faults: PlantedFaults) -> HeldResponse:
    return HeldResponse(drive, faults.second_mode_frequency, faults.second_mode_damping)


def _path(drive: Drive, model: SecondOrder, faults: PlantedFaults, after: float, step_angle: float) -> MotionPath:
    """What the sensor follows, with knots fine enough for a cubic in between."""
    gain = model.gain * faults.voltage_scale
    if faults.nonlinearity.is_none:
        step = min(drive.interval, step_angle / (2 * math.pi * model.natural_frequency))
        unit = linear_path(drive, model.natural_frequency, model.damping_ratio, step=step, after=after)
        path = MotionPath(time=unit.time, angle=gain * unit.angle, rate=gain * unit.rate)
    else:
        scaled = SecondOrder.from_vector(model.vector * np.array([faults.voltage_scale, 1, 1, 1]))
        path = stepped_motion(drive, scaled, faults.nonlinearity, after=after, step_angle=step_angle)
    if faults.second_mode_gain:
        second, part = _second(drive, faults), gain * faults.second_mode_gain
        path = MotionPath(
            time=path.time,
            angle=path.angle + part * second.at(path.time),
            rate=path.rate + part * second.rate_at(path.time),
        )
    if faults.backlash:
        path = with_play(path, faults.backlash)
    if math.isfinite(faults.sensor_pole):
        path = lagged(path, 1 / (2 * math.pi * faults.sensor_pole))
    return path
