"""Which faults are tried on the records? One entry each: what it predicts, and where its fit begins.

The physics is that of `freqid.capture.planted_faults`, stepped more coarsely. The numbers of a fault are in the rig's
units, but for the spring, whose number is the relative change of stiffness at the largest swing seen.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from freqid.capture.planted_faults import NO_FAULTS, PlantedFaults, angle_with_faults
from freqid.crosscheck.causes.recorded_tests import RecordedTest
from freqid.crosscheck.causes.shared_fit import predicted_linear
from freqid.estimate.prediction import MotionParameters
from freqid.held_response import free_decay
from freqid.second_order import SecondOrder

__all__ = ["HEALTHY", "Mechanism", "mechanisms_for"]

Floats = NDArray[np.float64]
STEP_ANGLE = 0.08  # rad of the natural frequency per step: 0.08^2 / 8 of a spring's change is 0.08 %
SMALLEST_LAG = 1e-3  # of the natural period
Build = Callable[[RecordedTest, MotionParameters, Floats], PlantedFaults]
Change = Callable[[RecordedTest, SecondOrder, Floats], SecondOrder]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Mechanism:
    """A fault as a hypothesis: `build` plants it, `change` gives a test another rig, `add` adds to the angle.

    `starts` are sets of numbers to begin from; `difference` the steps of the derivatives; `low` and `high` the bounds.
    At first only `looked_at` of the numbers (the leading ones) are varied; the others have no slope at the start, or
    the start is as good as any near it. `neutral` starts are the healthy rig.
    """

    code: str
    starts: tuple[tuple[float, ...], ...]
    difference: tuple[float, ...]
    low: tuple[float, ...]
    high: tuple[float, ...]
    looked_at: int = 1
    neutral: bool = True
    build: Build | None = None
    change: Change | None = None
    add: Callable[[RecordedTest, Floats], Floats] | None = None

    def predict(self, test: RecordedTest, p: MotionParameters, numbers: Floats) -> Floats:
        """Angle (N,) at the frames of `test`."""
        if self.change is not None:
            p = replace(p, model=self.change(test, p.model, numbers))
        faults = NO_FAULTS if self.build is None else self.build(test, p, numbers)
        angle = predicted_linear(test, p) if faults == NO_FAULTS else _with_faults(test, p, faults)
        return angle if self.add is None else angle + self.add(test, numbers)

    def steps(self, numbers: Floats) -> Floats:
        """Difference steps."""
        return np.array(self.difference)

    def bounded(self, numbers: Floats) -> Floats:
        """Within the bounds."""
        return np.clip(numbers, self.low, self.high)


HEALTHY = Mechanism(code="healthy", starts=((),), difference=(), low=(), high=())


def _with_faults(test: RecordedTest, p: MotionParameters, faults: PlantedFaults) -> Floats:
    record = test.record
    angle = angle_with_faults(
        record.drive,
        p.model,
        faults,
        p.clock_ratio * record.stamp,
        exposure=record.exposure * p.clock_ratio,
        step_angle=STEP_ANGLE,
    )
    if record.free_start:
        decay = free_decay(
            2 * np.pi * p.model.natural_frequency, p.model.damping_ratio, record.stamp - record.stamp[0]
        )
        angle = angle + p.start_angle * decay[:, 0] + p.start_rate * decay[:, 1]
    return p.rest_angle + angle


def mechanisms_for(tests: tuple[RecordedTest, ...]) -> tuple[Mechanism, ...]:
    """All that can be tried on these records, with starts that fit their size."""
    swing = max(float(np.max(np.abs(t.fit.prediction.angle - t.fit.parameters.rest_angle))) for t in tests)
    typical = max(float(np.std(t.record.angle)) for t in tests)
    volts = max(float(np.max(np.abs(t.record.drive.value))) for t in tests)
    fn = float(np.median([t.fit.parameters.model.natural_frequency for t in tests]))
    found = [
        *_nonlinear(tests, swing, typical),
        *_driver(tests, volts, fn),
        *_lags(fn),
        _drift(tests, typical),
        *_second_modes(tests, fn),
    ]
    if {"response", "step"} <= {t.kind for t in tests}:
        found += _differences()
    return tuple(found)


def _single(code: str, start: float, step: float, bounds: tuple[float, float], build: Build) -> Mechanism:
    """One number, whose first look is a step from `start`."""
    return Mechanism(code=code, starts=((start,),), difference=(step,), low=bounds[:1], high=bounds[1:], build=build)


def _threshold(
    code: str, starts: tuple[float, ...], step: float, bounds: tuple[float, float], build: Build
) -> Mechanism:
    """One number that acts from a threshold on, so that its first look is a choice of `starts`."""
    return Mechanism(
        code=code,
        starts=tuple((s,) for s in starts),
        difference=(step,),
        low=bounds[:1],
        high=bounds[1:],
        looked_at=0,
        neutral=False,
        build=build,
    )


def _nonlinear(tests: tuple[RecordedTest, ...], swing: float, typical: float) -> list[Mechanism]:
    highest = max(_flat_top(t) for t in tests)
    return [
        _single("dry_friction", 0.0, 0.02 * typical, (0.0, swing / 2),
                lambda t, p, n: PlantedFaults(dry_friction=float(n[0]))),
        _single("backlash", 0.0, 0.05 * typical, (0.0, swing),
                lambda t, p, n: PlantedFaults(backlash=float(n[0]))),
        _single("spring", 0.0, 0.02, (-0.6, 5.0),
                lambda t, p, n: PlantedFaults(spring_hardening=float(n[0]), spring_angle=swing)),
        _single("unequal_spring", 0.0, 0.02, (-0.6, 0.6),
                lambda t, p, n: PlantedFaults(spring_asymmetry=float(n[0]), spring_angle=swing)),
        _single("unequal_gain", 0.0, 0.01, (-1.0, 1.0),
                lambda t, p, n: PlantedFaults(gain_asymmetry=float(n[0]))),
        _threshold("end_stop", (highest,), -0.005 * highest, (0.2 * swing, 1.2 * swing),
                lambda t, p, n: PlantedFaults(end_stop=float(n[0]), restitution=0.5)),
    ]  # fmt: skip


def _flat_top(test: RecordedTest) -> float:
    """The largest swing from rest that the frames show: the 5th largest on its side, so that noise adds little."""
    deviation = np.abs(test.record.angle - test.fit.parameters.rest_angle)
    return float(np.sort(deviation)[-min(5, len(deviation))])


def _driver(tests: tuple[RecordedTest, ...], volts: float, fn: float) -> list[Mechanism]:
    largest = {t.number: float(np.ptp(t.record.drive.value)) / 2 for t in tests}

    def ramp(test: RecordedTest, p: MotionParameters, numbers: Floats) -> PlantedFaults:
        if test.kind != "step" or numbers[0] <= 1e-5 / fn:
            return NO_FAULTS
        return PlantedFaults(slew_limit=largest[test.number] / float(numbers[0]))

    return [
        _threshold("saturation", _clip_levels(tests), -0.005 * volts, (0.05 * volts, volts),
                lambda t, p, n: PlantedFaults(saturation=float(n[0]))),
        replace(
            _threshold("step_was_a_ramp", (0.06 / fn, 0.15 / fn, 0.4 / fn), 0.01 / fn, (0.0, 3 / fn), ramp),
            change=lambda t, model, n: _earlier(model, float(n[0]) / 2 if t.kind == "step" else 0.0),
        ),
    ]  # fmt: skip


def _clip_levels(tests: tuple[RecordedTest, ...]) -> tuple[float, ...]:
    """Levels to begin from: parts of each test's largest voltage, as the fit does not cross from one to another."""
    peaks = [float(np.max(np.abs(t.record.drive.value))) for t in tests]
    levels = {part * peak for peak in peaks for part in (0.96, 0.85, 0.7, 0.5)}
    return tuple(sorted(levels, reverse=True))


def _lags(fn: float) -> list[Mechanism]:
    """What lags also delays; the delay of the rig makes up for it, so that the rest of the motion keeps its place."""
    natural = 1 / (2 * math.pi * fn)
    pole = _threshold(
        "extra_pole", (0.05 * natural, 0.2 * natural), 0.01 * natural, (SMALLEST_LAG * natural, 5 * natural),
        lambda t, p, n: PlantedFaults(driver_pole=1 / (2 * math.pi * float(n[0]))),
    )  # fmt: skip
    exposure = _threshold(
        "hidden_exposure", (0.03 / fn, 0.1 / fn), 0.005 / fn, (0.0, 1 / fn),
        lambda t, p, n: PlantedFaults(hidden_exposure=float(n[0])),
    )  # fmt: skip
    return [
        replace(pole, change=lambda t, model, n: _earlier(model, float(n[0]))),
        replace(exposure, change=lambda t, model, n: _earlier(model, float(n[0]) / 2)),
    ]


def _earlier(model: SecondOrder, by: float) -> SecondOrder:
    return replace(model, delay=model.delay - by)


def _drift(tests: tuple[RecordedTest, ...], typical: float) -> Mechanism:
    def add(test: RecordedTest, numbers: Floats) -> Floats:
        share = (test.record.stamp - test.record.stamp[0]) / np.ptp(test.record.stamp)
        return np.asarray(numbers[test.number] * share)

    n = len(tests)
    return Mechanism(
        code="drift", starts=((0.0,) * n,), difference=(0.1 * typical,) * n, low=(-math.inf,) * n,
        high=(math.inf,) * n, looked_at=n, add=add,
    )  # fmt: skip


def _second_modes(tests: tuple[RecordedTest, ...], fn: float) -> list[Mechanism]:
    fastest = 0.5 / min(t.record.frame_interval for t in tests)
    top = min(0.95 * fastest, 12 * fn)
    if top < 1.5 * fn:
        return []

    def build(test: RecordedTest, p: MotionParameters, numbers: Floats) -> PlantedFaults:
        part, frequency, damping = (float(v) for v in numbers)
        return PlantedFaults(
            second_mode_gain=part, second_mode_frequency=math.exp(frequency), second_mode_damping=math.exp(damping)
        )

    # a start is as wide as its damping ratio of 0.1 on either side
    n = max(4, math.ceil(math.log(top / (1.3 * fn)) / 0.2))
    starts = tuple((0.0, math.log(f), math.log(0.1)) for f in np.geomspace(1.3 * fn, top, n))
    return [
        Mechanism(
            code="second_mode",
            starts=starts,
            difference=(0.01, 0.01, 0.05),
            low=(-1.0, math.log(1.15 * fn), math.log(0.002)),
            high=(1.0, math.log(1.1 * top), math.log(0.7)),
            build=build,
        )
    ]


def _differences() -> list[Mechanism]:
    """The step test's rig, or its units, differ from those of the frequency test."""

    def scaled(places: tuple[int, ...]) -> Change:
        def change(test: RecordedTest, model: SecondOrder, numbers: Floats) -> SecondOrder:
            if test.kind != "step":
                return model
            vector = model.vector
            vector[list(places)] *= np.exp(numbers)
            return SecondOrder.from_vector(vector)

        return change

    def one(code: str, *places: int) -> Mechanism:
        n = len(places)
        return Mechanism(code=code, starts=((0.0,) * n,), difference=(1e-3,) * n, low=(-2.0,) * n, high=(2.0,) * n,
                         looked_at=n, change=scaled(places))  # fmt: skip

    return [one("scale_error", 0), one("time_scale", 1), one("damping_differs", 2), one("operating_point", 0, 1, 2)]
