"""What exactly is to be explained? One run, ready for the estimators, nothing interpolated.

The voltage becomes a `Drive` on its own clock; every readable angle keeps its own stamp, moved to the end of
its exposure. A smooth voltage is refined by a cubic spline so that straight lines between its points serve.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from freqid.capture.simulated_rig import STAMP_TO_EXPOSURE_END
from freqid.errors import EstimationError
from freqid.estimate.frame_grid import FrameGrid
from freqid.estimate.rounded_stamps import evened
from freqid.held_response import Drive
from freqid.quantity import Caveat
from freqid.records import InputStream, Periodicity, Run

__all__ = ["MINIMUM_FRAMES", "Record"]

Floats = NDArray[np.float64]

MINIMUM_FRAMES = 20
UNIFORM_WITHIN = 0.05  # of one interval: stamps closer to a straight line than this are one grid


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Record:
    """Drive, exposure-end stamps (N,) s and angles (N,) of the readable frames.

    `free_start` is true where the rig may have been moving when the record began; then the estimators
    add its free decay. `held_delay` is set where the delay is not to be
    fitted. `same_rows` is true where voltage and angle stand in the same rows of one log. `frame_interval` is the
    spacing the
    sensor meant to keep, s. `stamp_uncertainty` is the standard uncertainty that all stamps share, s.
    """

    drive: Drive
    stamp: Floats
    angle: Floats
    angle_unit: str
    exposure: float
    frame_interval: float
    common_clock: bool
    free_start: bool
    held_delay: float | None
    periodicity: Periodicity | None
    caveats: tuple[Caveat, ...]
    same_rows: bool = False
    stamp_uncertainty: float = 0.0

    def keep(self, chosen: NDArray[np.bool_]) -> Record:
        """The record with the chosen frames (N,) only."""
        return replace(self, stamp=self.stamp[chosen], angle=self.angle[chosen])

    def with_stamps(self, stamp: Floats) -> Record:
        """The record with other stamps (N,) for the same frames."""
        return replace(self, stamp=stamp)

    @classmethod
    def from_run(cls, run: Run) -> Record:
        """Prepare a run; raises EstimationError where too few frames are readable or nothing moves."""
        a = run.angle
        usable = np.isfinite(a.time) & np.isfinite(a.angle)
        if usable.sum() < MINIMUM_FRAMES:
            raise EstimationError(
                f"{run.name}: {int(usable.sum())} readable angle samples; at least {MINIMUM_FRAMES} are needed: "
                f"record longer"
            )
        order = np.argsort(a.time[usable], kind="stable")
        stamp, angle = a.time[usable][order], a.angle[usable][order]
        if np.ptp(angle) == 0:
            raise EstimationError(f"{run.name}: the angle is constant ({angle[0]:g} {a.angle_unit}): check the sensor")
        if np.ptp(stamp) == 0:
            raise EstimationError(f"{run.name}: all angle stamps are {stamp[0]:g} s: check the time column")
        caveats: list[Caveat] = []
        if not usable.all():
            caveats.append(Caveat("unreadable_frames", f"{int((~usable).sum())} frames without a readable angle were "
                                                       f"left out."))
        stamp, step = evened(stamp)
        if step:
            caveats.append(_rounded(step))
        drive, remarks = _drive(run.input, run.name)
        stamp = stamp + STAMP_TO_EXPOSURE_END[a.stamp] * a.exposure
        if run.common_clock and not run.input.commanded:
            covered = (stamp >= drive.start) & (stamp <= drive.stop + drive.interval)
            stamp, angle = stamp[covered], angle[covered]
            if len(stamp) < MINIMUM_FRAMES:
                raise EstimationError(
                    f"{run.name}: {len(stamp)} angle samples lie within the {drive.start:g} to {drive.stop:g} s of "
                    f"the input; at "
                    f"least {MINIMUM_FRAMES} are needed: give logs that overlap in time"
                )
        return cls(
            drive=drive,
            stamp=stamp,
            angle=angle,
            angle_unit=a.angle_unit,
            exposure=a.exposure,
            frame_interval=FrameGrid.from_stamps(stamp).interval,
            held_delay=None,
            common_clock=run.common_clock,
            free_start=not run.input.commanded,
            periodicity=run.input.periodicity,
            caveats=(*caveats, *remarks),
            same_rows=run.common_clock and not run.input.commanded,
            stamp_uncertainty=step / np.sqrt(12),
        )


def _rounded(step: float) -> Caveat:
    return Caveat(
        "stamps_rounded",
        f"The angle's stamps are rounded to {step:.3g} s; the frames were taken as evenly spaced. Whether they are "
        f"rounded to the nearest or down is not known: a delay on a common clock is uncertain by {step / 2:.2g} s.",
    )


def _drive(source: InputStream, name: str) -> tuple[Drive, list[Caveat]]:
    good = np.isfinite(source.voltage) & np.isfinite(source.time)
    time, voltage = source.time[good], source.voltage[good]
    if len(voltage) < 2 or np.ptp(voltage) == 0:
        shown = f"{voltage[0]:g} V" if len(voltage) else "not a single readable sample"
        raise EstimationError(f"{name}: the input is constant ({shown}): check the input column or channel")
    if np.ptp(time) == 0:
        raise EstimationError(f"{name}: all input stamps are {time[0]:g} s: check the time column")
    order = np.arange(len(time))
    interval, start = (float(v) for v in np.polyfit(order, time, 1))
    if abs(start - time[0]) < 1e-6 * interval:
        start = float(time[0])  # rounding only: the first sample is the start
    deviation = float(np.max(np.abs(time - start - order * interval)))
    smooth = source.hold == "smooth"
    if deviation > max(UNIFORM_WITHIN * interval, 0.6 * _resolution(time)):
        return _from_irregular(time, voltage, deviation, smooth=smooth)
    periodicity = source.periodicity
    if smooth and periodicity is not None and abs(time[-1] + interval - periodicity.stop) < 0.1 * interval:
        # the last interval of a whole number of periods leads back to where the first period began
        voltage = np.append(voltage, voltage[round((periodicity.start - start) / interval)])
    refine = 8 if len(voltage) < 20_000 else (4 if len(voltage) < 500_000 else 1)
    if smooth:
        return Drive.through_smooth_samples(voltage, start=start, interval=interval, refine=refine), []
    return Drive.from_samples(voltage, start=start, interval=interval, smooth=False), []


def _from_irregular(time: Floats, voltage: Floats, deviation: float, *, smooth: bool) -> tuple[Drive, list[Caveat]]:
    """Irregular input stamps: the voltage on a grid four times as fine as their usual spacing."""
    gaps = np.diff(time)
    fine = float(np.median(gaps[gaps > 0])) / 4
    grid = time[0] + fine * np.arange(int((time[-1] - time[0]) / fine) + 1)
    if smooth:
        voltage = np.interp(grid, time, voltage)
    else:
        voltage = voltage[np.searchsorted(time, grid + 1e-12, side="right") - 1]
    caveat = Caveat(
        "input_stamps_irregular",
        f"The input stamps are irregular (up to {deviation:.2g} s off a uniform grid); the voltage was placed on a "
        f"grid of "
        f"{fine:.2g} s.",
    )
    return Drive.from_samples(voltage, start=float(time[0]), interval=fine, smooth=smooth), [caveat]


def _resolution(time: Floats) -> float:
    """Coarsest decimal step (1, 0.1, ... 1e-6 s) that all stamps are multiples of; 0 if none."""
    for step in (1.0, 0.1, 0.01, 1e-3, 1e-4, 1e-5, 1e-6):
        if np.all(np.abs(time / step - np.round(time / step)) < 1e-3):
            return step
    return 0.0
