"""What would the model have recorded, and how does that change with each parameter?

The angle recorded at stamp s (end of exposure) is

    y(s) = rest + K * mean over exposure of unit_response(ratio * s - lag) + free decay of the start

with lag = delay - clock offset. On a common clock the ratio is 1 and the lag is the delay. Derivatives by K,
lag, ratio, rest and start are exact; those by natural frequency and damping ratio are differences of the exact
response: forward with a relative step of 1e-6 (truncation about 1e-6 Q), central with 1e-4 (truncation about 2e-9 Q^2)
where the voltage is
sampled so finely that rounding would show.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.record import Record
from freqid.held_response import HeldResponse, free_decay
from freqid.second_order import SecondOrder

__all__ = ["NUISANCE", "MotionParameters", "Prediction", "predict"]

Floats = NDArray[np.float64]
FORWARD_STEP, CENTRAL_STEP = 1e-6, 1e-4
FINE = 3e-3  # rad of the natural frequency per sample: below, rounding (1e-16 / FINE^2) needs the larger step
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
    return _motion(record, p)[0]


def predict(record: Record, p: MotionParameters) -> Prediction:
    """Predicted angle and derivatives at every stamp of the record."""
    free = free_parameters(record)
    m = p.model
    angle, unit, rate, decay = _motion(record, p)
    columns = [unit]
    fine = 2 * np.pi * m.natural_frequency * record.drive.interval < FINE
    for name in ("natural_frequency", "damping_ratio"):
        value = getattr(m, name)
        step = value * (CENTRAL_STEP if fine else FORWARD_STEP)
        high = _motion(record, replace(p, model=replace(m, **{name: value + step})))[0]
        low = _motion(record, replace(p, model=replace(m, **{name: value - step})))[0] if fine else angle
        columns.append((high - low) / (2 * step if fine else step))
    if 3 in free:
        columns.append(-m.gain * rate)
    if 4 in free:
        # the exposure scales along, so the mean belongs to its middle
        columns.append(m.gain * rate * (record.stamp - record.exposure / 2))
    columns.append(np.ones_like(angle))
    if 6 in free:
        columns.extend([decay[:, 0], decay[:, 1]])
    return Prediction(angle=angle, jacobian=np.stack(columns, axis=1), free=free)


def _motion(record: Record, p: MotionParameters) -> tuple[Floats, Floats, Floats, Floats]:
    m = p.model
    response = HeldResponse(record.drive, m.natural_frequency, m.damping_ratio)
    unit, rate = response.mean_and_rate(
        p.clock_ratio * record.stamp - m.delay, record.exposure * p.clock_ratio
    )
    if not record.free_start:
        return p.rest_angle + m.gain * unit, unit, rate, np.empty((0, 2))
    decay = free_decay(2 * np.pi * m.natural_frequency, m.damping_ratio, record.stamp - record.stamp[0])
    angle = p.rest_angle + m.gain * unit + p.start_angle * decay[:, 0] + p.start_rate * decay[:, 1]
    return angle, unit, rate, decay
