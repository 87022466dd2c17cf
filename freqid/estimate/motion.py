"""How did the rig move? The fitted motion of one record with its covariance, and what had to be held or left out.

Whole-record fit, then mis-tracked frames and silent losses (`outliers`, `silent_losses`), then weights from the
measured noise
(`weighted_fit`). On a common clock the delay is held at zero where the best one would be negative, or where a fast pole
and the delay cannot be told apart; a caveat says so. A fit that ran away is refused.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from freqid.errors import EstimationError
from freqid.estimate.outliers import without_outliers
from freqid.estimate.periodic import LineRegression, steady_noise
from freqid.estimate.prediction import MotionParameters
from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit, fit_record, refine
from freqid.estimate.silent_losses import SilentLosses, with_silent_losses
from freqid.estimate.starting_values import starting_values
from freqid.estimate.weighted_fit import WeightedFit, covariance_of, fit_weighted
from freqid.quantity import Caveat

__all__ = ["Motion", "estimate_motion", "parameter_covariance"]

Floats = NDArray[np.float64]

RIDGE = 0.5  # relative uncertainty of the natural frequency beyond which it is not determined
SMALLEST_DAMPING, LARGEST_DAMPING = 1e-6, 300.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Motion:
    """Steps 1 to 3: the record as fitted, the fit with its covariance, and what had to be held."""

    record: Record
    weighted: WeightedFit
    lines: LineRegression | None
    caveats: tuple[Caveat, ...] = ()
    outlier_at: Floats = field(default_factory=lambda: np.empty(0))
    losses: SilentLosses = field(default_factory=SilentLosses)

    @property
    def undetermined(self) -> tuple[str, ...]:
        """Parameters that the record does not determine."""
        return () if self.record.held_delay is None else ("delay",)


def estimate_motion(record: Record) -> Motion:
    """Fit the motion with the covariance of its free parameters.

    On a common clock the delay is held at zero where the best one would be negative, or where a fast pole and the
    delay cannot be told apart; a caveat says so.
    """
    record, fit, outlier_at, losses = _cleaned(record, fit_record(record))
    told = _cleaning_caveats(outlier_at, losses)
    reason = _acausal(record, fit)
    if reason is None and record.common_clock and _ran_away(record, fit):
        reason = (
            "With a free delay no model fits: the delay was held at 0; check that the angle does not come before the "
            "voltage."
        )
    if reason is None:
        _refuse_runaway(record, fit)
        motion = replace(_weighted(record, fit), caveats=told, outlier_at=outlier_at, losses=losses)
        reason = _fast_pole(record, motion.weighted)
        if reason is None:
            return motion
    held, best = _with_held_delay(record, fit)
    _refuse_runaway(held, best)
    return replace(
        _weighted(held, best),
        caveats=(*told, Caveat("delay_held_at_zero", reason)),
        outlier_at=outlier_at,
        losses=losses,
    )


def _with_held_delay(record: Record, fit: RecordFit) -> tuple[Record, RecordFit]:
    """The record with its delay held at zero, and the better of two fits of it."""
    held = replace(record, held_delay=0.0)
    start = replace(fit.parameters, model=replace(fit.parameters.model, delay=0.0))
    starts = [replace(one, model=replace(one.model, delay=0.0)) for one in starting_values(record)]
    trials = [refine(held, start), refine(held, _sluggish(start)), fit_record(held, starts=starts)]
    fits = [trial for trial in trials if trial is not None]
    if not fits:
        raise EstimationError("no model with a delay of zero could be fitted: check that input and angle belong "
                              "together")
    return held, min(fits, key=lambda trial: trial.sum_of_squares)


def _cleaned(record: Record, fit: RecordFit) -> tuple[Record, RecordFit, Floats, SilentLosses]:
    """Outliers left out, silently lost frames put back into the stamps; where both were."""
    if record.same_rows:
        return *without_outliers(record, fit), SilentLosses()
    timed, timed_fit, losses = with_silent_losses(record, fit)
    timed, timed_fit, outlier_at = without_outliers(timed, timed_fit)
    if len(outlier_at):
        # without the outliers a loss shows more sharply
        timed, timed_fit, more = with_silent_losses(timed, timed_fit)
        losses = losses.joined(more)
    return timed, timed_fit, outlier_at, losses


def _cleaning_caveats(outlier_at: Floats, losses: SilentLosses) -> tuple[Caveat, ...]:
    found = []
    if len(outlier_at):
        one = len(outlier_at) == 1
        found.append(
            Caveat(
                "outliers_left_out",
                f"{len(outlier_at)} angle sample{'' if one else 's'} more than six standard deviations off "
                f"{'was' if one else 'were'} left out, at {_instants(outlier_at)} of the angle log.",
            )
        )
    if len(losses.at):
        widest = float(np.max(np.diff(losses.between, axis=1)))
        found.append(
            Caveat(
                "frames_silently_lost",
                f"{len(losses.at)} times frames were lost without a gap in the stamps; the later stamps were moved, "
                f"from {_instants(losses.at)} on (each instant is known to within {widest:.2g} s at 95 %).",
            )
        )
    return tuple(found)


def _instants(times: Floats) -> str:
    shown = ", ".join(f"{t:.2f}" for t in times[:6])
    return f"{shown}{', ...' if len(times) > 6 else ''} s"


def _weighted(record: Record, fit: RecordFit) -> Motion:
    """Weighted with the noise between the harmonics where there is one, else as it is with a robust covariance."""
    lines = None if record.periodicity is None else LineRegression.of(record, fit)
    noise = None if lines is None else steady_noise(record, fit, lines)
    weighted = covariance_of(record, fit) if noise is None else fit_weighted(record, fit, noise)
    return Motion(record=record, weighted=_with_shared_stamp_error(record, weighted), lines=lines, caveats=())


def _with_shared_stamp_error(record: Record, weighted: WeightedFit) -> WeightedFit:
    """What all stamps may be wrong by together is the delay's alone; an unknown clock offset holds it anyway."""
    free = weighted.fit.prediction.free
    if not record.common_clock or record.stamp_uncertainty == 0 or 3 not in free:
        return weighted
    covariance = weighted.covariance.copy()
    covariance[free.index(3), free.index(3)] += record.stamp_uncertainty**2
    return replace(weighted, covariance=covariance)


def _ran_away(record: Record, fit: RecordFit) -> bool:
    """Whether the fit left everything that the record could show."""
    m = fit.parameters.model
    span = record.stamp[-1] - record.stamp[0]
    low, high = 0.01 / span, 20 / min(record.frame_interval, record.drive.interval)
    return not (low < m.natural_frequency < high and SMALLEST_DAMPING < m.damping_ratio < LARGEST_DAMPING)


def _refuse_runaway(record: Record, fit: RecordFit) -> None:
    """A fit that ran away is no answer."""
    m = fit.parameters.model
    if not _ran_away(record, fit):
        return
    raise EstimationError(
        f"the fit ran away to a natural frequency of {m.natural_frequency:.3g} Hz and a damping ratio of "
        f"{m.damping_ratio:.3g}: the "
        "record does not determine a second-order model; check that input and angle belong together, excite around "
        "the resonance",
        fit,
    )


def _acausal(record: Record, fit: RecordFit) -> str | None:
    """Why the delay must be held: on a common clock the angle cannot come before the voltage."""
    lag = fit.parameters.model.delay
    if not record.common_clock or lag >= -max(record.frame_interval, record.drive.interval):
        return None
    return (
        f"The best fit would put the angle {-lag:.3g} s before the voltage, which cannot be: the delay was held at 0 "
        f"(noise, "
        "drift or further dynamics take its place)."
    )


def _fast_pole(record: Record, weighted: WeightedFit) -> str | None:
    """Why the delay must be held: an overdamped rig's fast pole looks like a delay."""
    model = weighted.fit.parameters.model
    if not record.common_clock or model.damping_ratio <= 1:
        return None
    variance = parameter_covariance(weighted)[1, 1]
    if variance > 0 and np.sqrt(variance) <= RIDGE * model.natural_frequency:
        return None
    return (
        "The fast pole and a delay look alike in this record: the delay was held at 0, so that the fast pole carries "
        "the "
        "whole lag."
    )


def _sluggish(start: MotionParameters) -> MotionParameters:
    """The same slowest pole with a second one ten times faster: a start on the ridge of overdamped rigs."""
    slow = 1 / start.model.slowest_decay
    fast = 10 * slow
    wn = np.sqrt(slow * fast)
    model = replace(
        start.model, natural_frequency=float(wn / (2 * np.pi)), damping_ratio=float((slow + fast) / (2 * wn))
    )
    return replace(start, model=model)


def parameter_covariance(weighted: WeightedFit) -> Floats:
    """Covariance (4, 4) of the model's parameters; a held delay has no variance of its own."""
    free = weighted.fit.prediction.free
    covariance = np.zeros((4, 4))
    rows = [free.index(i) for i in range(4) if i in free]
    kept = [i for i in range(4) if i in free]
    covariance[np.ix_(kept, kept)] = weighted.covariance[np.ix_(rows, rows)]
    return covariance
