"""From one run to frequency response, clock map and model: the whole estimate, in order.

1. The record as it is (`record`), a start without the user's help (`starting_values`), the whole-record fit
(`record_fit`).
2. The noise, measured between the harmonics where the excitation is periodic (`noise_spectrum`).
3. The four parameters with their joint covariance (`weighted_fit`).
4. The frequency response around that fit: least squares at the lines, where distortion shows as well, or the local
polynomial method (`measured_response`).
5. The model held against that response (`adequacy`); where it does not fit, the uncertainty of what does not fit
(`misfit_covariance`). What is doubtful becomes a caveat.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from freqid.capture.clock_map import ClockMap
from freqid.errors import EstimationError
from freqid.estimate.adequacy import direction_told, with_direction
from freqid.estimate.distortion import DistortionLevels
from freqid.estimate.distortion_summary import distortion_caveats, summarize_distortion
from freqid.estimate.feedthrough import Feedthrough, fit_feedthrough
from freqid.estimate.frame_grid import FrameGrid
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.measured_amplitude import measured_amplitude
from freqid.estimate.measured_response import measure_response
from freqid.estimate.misfit_covariance import enlarged_by_misfit
from freqid.estimate.model import Adequacy, IdentifiedModel
from freqid.estimate.motion import Motion, estimate_motion
from freqid.estimate.prediction import angle_only
from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit
from freqid.estimate.structures import BetterStructure, find_better_structure
from freqid.notebook_form import shown_by
from freqid.quantity import Caveat, Quantity
from freqid.records import Run

__all__ = ["Identification", "Method", "clock_caveats", "clock_map", "identify"]

Floats = NDArray[np.float64]
Method = Literal["auto", "periodic", "local-polynomial"]

POORLY_EXPLAINED = 0.5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Identification:
    """What one run tells: response, model (with the clock map), distortion at the lines without voltage, and the
    residual (N,) at `time` (N,) on the input's clock.
    """

    response: FrequencyResponse
    model: IdentifiedModel
    time: Floats
    residual: Floats
    angle: Floats
    distortion: DistortionLevels | None = None

    _repr_html_ = shown_by("identification_html")


def identify(run: Run, *, method: Method = "auto") -> Identification:
    """Estimate response and model from a run.

    `method` "auto" takes "periodic" where the excitation is known to repeat, else "local-polynomial".
    Raises EstimationError where the record does not determine the answer.

    Examples
    --------
    >>> import numpy as np
    >>> from freqid import InputStream, SecondOrder, SimulatedRig, SimulatedSensor
    >>> vane = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
    >>> rig = SimulatedRig(model=vane, sensor=SimulatedSensor(sample_rate=60.0, exposure=0.004, noise=0.1))
    >>> time = np.arange(0, 30, 0.01)
    >>> sweep = InputStream(
    ...     time=time, voltage=np.sin(2 * np.pi * (0.5 + 0.1 * time) * time), hold="zero-order", commanded=True
    ... )
    >>> found = identify(rig.run(sweep, kind="response", name="response-001", rng=np.random.default_rng(1)))
    >>> {name: round(q.value, 2) for name, q in found.model.parameters.items() if name != "delay"}
    {'gain': 12.0, 'natural_frequency': 3.0, 'damping_ratio': 0.12}
    """
    record = Record.from_run(run)
    if method == "periodic" and record.periodicity is None:
        raise EstimationError(f"{run.name}: the excitation is not known to be periodic: use --method local-polynomial")
    if method == "local-polynomial":
        record = replace(record, periodicity=None)
    motion = estimate_motion(record)
    record, weighted = motion.record, motion.weighted
    measured = measure_response(motion)
    response, adequacy = measured.response, measured.adequacy
    feedthrough = None if measured.distorted else fit_feedthrough(record, weighted)  # its test knows of noise only
    if feedthrough is not None:
        adequacy = with_direction(adequacy, feedthrough)
    covariance, degrees = measured.covariance, measured.degrees_of_freedom
    fitted = weighted.fit.parameters.model
    distortion = summarize_distortion(measured.distortion, fitted.natural_frequency, angle_unit=record.angle_unit)
    caveats = [*record.caveats, *motion.caveats, *response.caveats, *_sign_caveats(record, weighted.fit)]
    caveats += distortion_caveats(distortion)
    if np.isfinite(adequacy.p_value) and not adequacy.adequate:
        better = find_better_structure(response, fitted, use=measured.independent)
        told = feedthrough if feedthrough is not None and direction_told(feedthrough) else None
        enlarged = enlarged_by_misfit(motion, measured)
        covariance, degrees = enlarged.covariance, enlarged.degrees_of_freedom
        if told is not None:
            covariance = covariance + np.outer(told.shift, told.shift)
        adequacy = replace(adequacy, better_structure=_better_name(better, told))
        caveats.append(_inadequate(adequacy, better, told))
    if weighted.fit.explained < POORLY_EXPLAINED:
        caveats.append(
            Caveat(
                "poorly_explained",
                f"The model explains only {100 * weighted.fit.explained:.0f} % of the angle's variance: "
                "check that input and angle belong together.",
            )
        )
    model = IdentifiedModel(
        model=fitted,
        covariance=covariance,
        degrees_of_freedom=degrees,
        angle_unit=record.angle_unit,
        adequacy=adequacy,
        clock=clock_map(run, motion),
        explained=weighted.fit.explained,
        caveats=(*caveats, *clock_caveats(record)),
        undetermined=motion.undetermined,
        runs=(run.name,),
        settings={"method": response.method, "free_start": record.free_start, "hold": run.input.hold},
        amplitude=measured_amplitude(record, weighted.fit),
        distortion=distortion,
    )
    p = weighted.fit.parameters
    return Identification(
        response=response,
        model=model,
        time=p.clock_ratio * record.stamp - (0.0 if record.common_clock else p.model.delay),
        residual=weighted.fit.residual,
        angle=record.angle,
        distortion=measured.distortion,
    )


def _better_name(better: BetterStructure | None, told: Feedthrough | None) -> str | None:
    if better is not None:
        return better.name
    return None if told is None else told.structure


def _inadequate(adequacy: Adequacy, better: BetterStructure | None, told: Feedthrough | None) -> Caveat:
    excess = np.sqrt(adequacy.statistic / adequacy.degrees_of_freedom)
    chance = f"p = {adequacy.p_value:.2g}" if adequacy.p_value > 1e-6 else "p < 1e-6"
    size = f"the misfit is {excess:.3g} times what noise alone would give"
    hint = "look at the residuals for nonlinearity or further dynamics"
    if told is not None:
        size = (
            f"the misfit has the shape that {_a(told.structure)} near {told.corner:.2g} Hz leaves behind, "
            f"{abs(told.deviation):.3g} standard uncertainties of it"
        )
    if better is not None:
        hint = (
            f"a model with {_a(better.name)} (at {better.frequency:.3g} Hz) does better (information criterion smaller "
            f"by {better.gained:.3g})"
        )
    return Caveat(
        "model_inadequate",
        f"A second-order model does not describe the response within its noise: {size} ({chance}). The intervals "
        f"contain the misfit; {hint}.",
    )


def _a(name: str) -> str:
    return f"{'an' if name[0] in 'ae' else 'a'} {name}"


def _sign_caveats(record: Record, fit: RecordFit) -> list[Caveat]:
    """With odd lines only and an unknown offset, a reversed sensor looks like a shift of half a period."""
    m, periodicity = fit.parameters.model, record.periodicity
    half_wave = periodicity is not None and bool(np.all(np.round(periodicity.lines * periodicity.period) % 2 == 1))
    if half_wave and periodicity is not None and not record.common_clock:
        for shift in (-0.5, 0.5):
            # the steady part is the same to the last bit, so the fit need not be repeated
            other = replace(m, gain=-m.gain, delay=m.delay + shift * periodicity.period)
            residual = record.angle - angle_only(record, replace(fit.parameters, model=other))
            if residual @ residual < fit.sum_of_squares * (1 + 20 / fit.degrees_of_freedom):
                return [
                    Caveat(
                        "sign_undetermined",
                        "The record does not show the onset of the excitation: a reversed sensor and a shift of half a "
                        "period look alike, so the sign of the gain and the delay are undetermined.",
                    )
                ]
    if m.gain < 0:
        return [Caveat("sensor_reversed", "The gain is negative: the angle moves against the voltage (sensor "
                                          "reversed?).")]
    return []


def clock_map(run: Run, motion: Motion) -> ClockMap:
    """What the fit and the stamps say about the two clocks."""
    record, weighted = motion.record, motion.weighted
    grid = FrameGrid.from_stamps(run.angle.time[np.isfinite(run.angle.time)])
    free = weighted.fit.prediction.free
    p = weighted.fit.parameters

    def deviation(number: int) -> float:
        return float(np.sqrt(weighted.covariance[free.index(number), free.index(number)])) if number in free else 0.0

    stamps = run.angle.time[np.isfinite(run.angle.time)]
    return ClockMap(
        ratio_ppm=Quantity.normal(
            (p.clock_ratio - 1) * 1e6, "ppm", deviation(4) * 1e6, weighted.degrees_of_freedom
        ),
        offset_known=record.common_clock,
        lag=Quantity.normal(p.model.delay, "s", deviation(3), weighted.degrees_of_freedom),
        lost_frames=grid.lost,
        lost_at=stamps[grid.before_gaps],
        frame_interval=grid.interval,
        jitter=grid.jitter,
        repeated_stamps=int(np.sum(np.diff(stamps) == 0)),
        frames=len(stamps),
        outlier_at=motion.outlier_at,
        silently_lost_at=motion.losses.at,
        silently_lost_between=motion.losses.between,
    )


def clock_caveats(record: Record) -> list[Caveat]:
    if record.common_clock:
        return []
    return [
        Caveat(
            "delay_includes_clock_offset",
            "The two logs share no clock: the delay contains the offset between them and is not the rig's own.",
        )
    ]

