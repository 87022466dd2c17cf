"""What exactly must a mechanism explain? The records of both tests, cleaned, each with its own linear fit.

Outliers and silent losses that the estimate found are left out or put back. A very long record is thinned: the voltage
to means over steps that the rig cannot tell from the original, the frames to every n-th. Of many runs the first two of
a kind with the most different voltages are taken, so that amplitude dependence shows.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from freqid.capture.clock_map import ClockMap
from freqid.crosscheck.evidence import Evidence
from freqid.errors import FreqidError
from freqid.estimate.prediction import MotionParameters
from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit, refine
from freqid.held_response import Drive
from freqid.records import Run, RunKind
from freqid.second_order import SecondOrder

__all__ = ["RecordedTest", "prepared_tests"]

Floats = NDArray[np.float64]

MOST_FRAMES = 6000
MOST_VOLTAGES = 120_000
THINNED_STEP = 0.01  # rad of the natural frequency
MOST_RUNS = 2  # of a kind


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RecordedTest:
    """One run's record with the linear fit of its own; `number` counts the records, names may repeat."""

    kind: RunKind
    number: int
    name: str
    record: Record
    fit: RecordFit

    @property
    def words(self) -> str:
        """What a sentence calls it."""
        return "frequency test" if self.kind == "response" else "step test"

    @property
    def covariance(self) -> Floats:
        """Covariance (3, 3) of gain, natural frequency and damping ratio from this record alone, for white noise."""
        jacobian, noise = self.fit.prediction.jacobian, self.fit.sum_of_squares / len(self.record.stamp)
        scale = np.maximum(np.linalg.norm(jacobian, axis=0), 1e-300)
        inverse = np.linalg.pinv((jacobian / scale).T @ (jacobian / scale), rcond=1e-12)
        return np.asarray((inverse / np.outer(scale, scale))[:3, :3] * noise)

    @property
    def relative_uncertainty(self) -> Floats:
        """Relative standard uncertainty (3,) of gain, natural frequency and damping ratio from this record alone."""
        return np.asarray(np.sqrt(np.diag(self.covariance)) / np.abs(self.fit.parameters.vector[:3]))

    @property
    def time(self) -> Floats:
        """Time of each frame's exposure middle on the voltage's clock, delay taken out: (N,) s."""
        p = self.fit.parameters
        return p.clock_ratio * self.record.stamp - p.model.delay - self.record.exposure / 2


def prepared_tests(evidence: Evidence, *, with_losses: bool = True) -> tuple[RecordedTest, ...]:
    """All records at hand, frequency tests first; those that cannot be fitted are left out.

    `with_losses` puts the silently lost frames that the estimates found back into the stamps.
    """
    recorded = evidence.recorded
    found = []
    for runs, result in ((recorded.response_runs, evidence.model), (recorded.step_runs, evidence.step)):
        clock = result.clock if with_losses else replace(result.clock, silently_lost_at=np.empty(0))
        for run in _most_different(runs):
            found.append(_prepared(run, result.model, clock, single=len(runs) == 1))
    return tuple(replace(one, number=i) for i, one in enumerate(one for one in found if one is not None))


def _most_different(runs: tuple[Run, ...]) -> tuple[Run, ...]:
    if len(runs) <= MOST_RUNS:
        return runs
    ordered = sorted(runs, key=lambda run: float(np.nanstd(run.input.voltage)))
    return ordered[0], ordered[-1]


def _prepared(run: Run, model: SecondOrder, clock: ClockMap, *, single: bool) -> RecordedTest | None:
    try:
        record = Record.from_run(run)
        if single:
            record = _cleaned(record, run, clock)
        record = _thinned(record, model)
        start = MotionParameters(
            model=model,
            clock_ratio=1.0 if record.common_clock else 1 + clock.ratio_ppm.value * 1e-6,
            rest_angle=float(np.mean(record.angle)),
        )
        if record.common_clock and model.delay == 0:
            record = replace(record, held_delay=0.0)
        fit = refine(record, start, evaluations=30)
    except (FreqidError, ValueError, FloatingPointError):
        return None
    return None if fit is None else RecordedTest(kind=run.kind, number=0, name=run.name, record=record, fit=fit)


def _cleaned(record: Record, run: Run, clock: ClockMap) -> Record:
    """Without the outliers, and with the silently lost frames back in the stamps."""
    if record.same_rows:
        return record
    late = np.searchsorted(np.sort(clock.silently_lost_at), record.stamp, side="right") * record.frame_interval
    shifted = record.with_stamps(record.stamp + late)
    if not len(clock.outlier_at):
        return shifted
    nearest = np.min(np.abs(shifted.stamp[:, None] - clock.outlier_at[None, :]), axis=1)
    return shifted.keep(nearest > record.frame_interval / 4)


def _thinned(record: Record, model: SecondOrder) -> Record:
    every = math.ceil(len(record.stamp) / MOST_FRAMES)
    if every > 1:
        record = record.keep(np.arange(len(record.stamp)) % every == 0)
    drive = record.drive
    if len(drive.value) <= MOST_VOLTAGES:
        return record
    together = int(THINNED_STEP / (2 * math.pi * model.natural_frequency * drive.interval))
    if together < 2:
        return record
    h = together * drive.interval
    edges = np.asarray(drive.start + h * np.arange(len(drive.value) // together + 1), dtype=np.float64)
    mean = np.diff(drive.integral_at(edges)) / h
    coarse = Drive.from_samples(np.concatenate([[0.0], mean]), start=drive.start - h, interval=h, smooth=False)
    return replace(record, drive=replace(coarse, rest=drive.rest))
