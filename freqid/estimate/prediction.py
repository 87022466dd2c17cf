"""What would the model have recorded, and how does that change with each parameter?

The angle recorded at stamp s (end of exposure) is

    y(s) = rest + K * mean over exposure of unit_response(ratio * s - lag) + free decay of the start

with lag = delay - clock offset. On a common clock the ratio is 1 and the lag is the delay. All derivatives are exact
(`freqid.held_response`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.record import Record
from freqid.held_response import HeldResponse, free_decay, free_decay_slopes
from freqid.second_order import SecondOrder

__all__ = ["NUISANCE", "MotionParameters", "Prediction", "predict"]

Floats = NDArray[np.float64]
NUISANCE = ("clock_ratio", "rest_angle", "start_angle", "start_rate")


@dataclass(frozen=True, slots=True, kw_only=True)
class MotionParameters:
    """Everything the recorded angle depends on. `delay` of the model is the lag (see the module)."""

    model: SecondOrder
    clock_ratio: float = 1.0
    rest_angle: float = 0.0
    start_angle: float = 0.0
    start_rate: float = 0.0

    @property
    def vector(self) -> Floats:
        """Gain, natural frequency, damping ratio, delay, then `NUISANCE`: shape (8,)."""
        return np.concatenate(
            [self.model.vector, [self.clock_ratio, self.rest_angle, self.start_angle, self.start_rate]]
        )

    @classmethod
    def from_vector(cls, vector: Floats) -> MotionParameters:
        """Back from `vector`."""
        ratio, rest, angle, rate = (float(v) for v in vector[4:])
        return cls(
            model=SecondOrder.from_vector(vector[:4]),
            clock_ratio=ratio,
            rest_angle=rest,
            start_angle=angle,
            start_rate=rate,
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Prediction:
    """Predicted angle (N,) and its derivatives (N, P) by the parameters numbered in `free`."""

    angle: Floats
    jacobian: Floats
    free: tuple[int, ...]


def free_parameters(record: Record) -> tuple[int, ...]:
    """Numbers of the parameters that this record leaves open."""
    delay = (3,) if record.held_delay is None else ()
    ratio = () if record.common_clock else (4,)
    start = (6, 7) if record.free_start else ()
    return (0, 1, 2, *delay, *ratio, 5, *start)


def angle_only(record: Record, p: MotionParameters) -> Floats:
    """Predicted angle (N,) without derivatives."""
    return _angle(p, _response(record, p).mean(*_exposures(record, p)), _decay(record, p))


def predict(record: Record, p: MotionParameters) -> Prediction:
    """Predicted angle and derivatives at every stamp of the record."""
    free = free_parameters(record)
    m = p.model
    motion = _response(record, p).mean_motion(*_exposures(record, p))
    decay = _decay(record, p)
    columns = [motion.angle, m.gain * motion.by_natural_frequency, m.gain * motion.by_damping_ratio]
    if record.free_start:
        start = p.start_angle, p.start_rate
        slopes = free_decay_slopes(2 * np.pi * m.natural_frequency, m.damping_ratio, _since_start(record), start)
        columns[1] += slopes[:, 0]
        columns[2] += slopes[:, 1]
    if 3 in free:
        columns.append(-m.gain * motion.rate)
    if 4 in free:
        # the exposure scales along, so the mean belongs to its middle
        columns.append(m.gain * motion.rate * (record.stamp - record.exposure / 2))
    columns.append(np.ones_like(motion.angle))
    if 6 in free:
        columns.extend(decay.T)
    return Prediction(angle=_angle(p, motion.angle, decay), jacobian=np.stack(columns, axis=1), free=free)


def _response(record: Record, p: MotionParameters) -> HeldResponse:
    return HeldResponse(record.drive, p.model.natural_frequency, p.model.damping_ratio)


def _exposures(record: Record, p: MotionParameters) -> tuple[Floats, float]:
    """End (N,) of each exposure on the input's clock, before the delay, and its width."""
    return p.clock_ratio * record.stamp - p.model.delay, record.exposure * p.clock_ratio


def _decay(record: Record, p: MotionParameters) -> Floats:
    """Free decay (N, 2) of the start; no columns where the rig was at rest."""
    if not record.free_start:
        return np.empty((len(record.stamp), 0))
    return free_decay(2 * np.pi * p.model.natural_frequency, p.model.damping_ratio, _since_start(record))


def _since_start(record: Record) -> Floats:
    return np.asarray(record.stamp - record.stamp[0])


def _angle(p: MotionParameters, unit: Floats, decay: Floats) -> Floats:
    start = np.array([p.start_angle, p.start_rate])[: decay.shape[1]]
    return np.asarray(p.rest_angle + p.model.gain * unit + decay @ start)
