"""Small data and edges: each gives a right answer with an interval that holds the truth, or a clear refusal.

Every case is run over a few seeds. Of n records the 95 % interval of one parameter misses the truth in at most as many
as a fair one does with probability 1 - 1e-4 (binomial): 3 of 4. To be sharper the errors in standard uncertainties are
judged too: their mean square over four seeds is F-distributed with 4 and the noise's degrees of freedom, and its
99.99 % point is the bound.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
import pytest
from scipy.stats import f as fisher

from excitation import (
    Limits,
    MultisineSettings,
    StepSettings,
    SweptSineSettings,
    design_multisine,
    design_step_sequence,
    design_swept_sine,
)
from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor, input_from_profile
from freqid.estimate.identification import identify
from freqid.records import InputStream, Run
from freqid.second_order import SecondOrder

LIMITS = Limits(voltage=5.0, slew_rate=5000.0, angle=30.0)
VANE = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
TWO_CLOCKS = {"common_clock": False, "clock_ratio": 1.0002, "clock_offset": -0.3}
SEEDS = 4


@dataclass(frozen=True)
class Edge:
    """One case: the rig, the excitation with its band, what is unusual about the sensor and about the log."""

    kind: str = "multisine"
    rig: dict[str, float] = field(default_factory=dict)
    band: tuple[float, float] = (0.5, 8.0)
    duration: float = 17.0
    period: float = 4.0
    rate: float = 500.0
    sensor: dict[str, float | bool] = field(default_factory=dict)
    log: Callable[[Run], Run] = lambda run: run

    @property
    def model(self) -> SecondOrder:
        """The true rig."""
        return replace(VANE, **self.rig)

    def drive(self) -> InputStream:
        """The designed voltage."""
        common = {"sample_rate": self.rate, "limits": LIMITS, "rigs": (self.model,), "duration": self.duration}
        if self.kind == "multisine":
            return input_from_profile(
                design_multisine(
                    MultisineSettings(band=self.band, phases="schroeder", period=self.period, **common)  # type: ignore[arg-type]
                )
            )
        if self.kind == "sweep":
            return input_from_profile(design_swept_sine(SweptSineSettings(band=self.band, **common)))  # type: ignore[arg-type]
        return input_from_profile(design_step_sequence(StepSettings(**common)))  # type: ignore[arg-type]


def first_periods(count: int) -> Callable[[Run], Run]:
    """Only so many steady periods were recorded."""

    def cut(run: Run) -> Run:
        periodicity = run.input.periodicity
        assert periodicity is not None
        late = 0.0 if run.common_clock else 0.35
        kept = run.angle.time < periodicity.start + count * periodicity.period + late
        return replace(run, angle=replace(run.angle, time=run.angle.time[kept], angle=run.angle.angle[kept]))

    return cut


def rounded(step: float) -> Callable[[Run], Run]:
    """Stamps rounded to a step."""
    return lambda run: replace(run, angle=replace(run.angle, time=np.round(run.angle.time / step) * step))


def counted(run: Run) -> Run:
    """The log knows frame numbers alone."""
    return replace(run, angle=replace(run.angle, time=np.arange(len(run.angle.time)) / 60.0))


EDGES = {
    "one period": Edge(log=first_periods(1)),
    "one period on two clocks": Edge(log=first_periods(1), sensor=TWO_CLOCKS),
    "two periods": Edge(log=first_periods(2)),
    "damping ratio 0.005, sweep": Edge(rig={"damping_ratio": 0.005}, kind="sweep", duration=30.0),
    "damping ratio 3, multisine": Edge(rig={"damping_ratio": 3.0}, band=(0.1, 8.0), duration=30.0, period=10.0),
    "damping ratio 3, sweep": Edge(rig={"damping_ratio": 3.0}, kind="sweep", band=(0.1, 8.0), duration=30.0),
    "resonance at 28 Hz, 60 frames/s": Edge(
        rig={"natural_frequency": 28.0, "delay": 0.002}, band=(2.0, 50.0), duration=12.0, period=2.0, rate=2000.0
    ),
    "resonance at 40 Hz, 60 frames/s": Edge(
        rig={"natural_frequency": 40.0, "delay": 0.002}, band=(2.0, 70.0), duration=12.0, period=2.0, rate=2000.0
    ),
    "resonance at 40 Hz, sweep": Edge(
        kind="sweep", rig={"natural_frequency": 40.0, "delay": 0.002}, band=(2.0, 70.0), duration=12.0, rate=2000.0
    ),
    "resonance at 40 Hz, steps": Edge(
        kind="steps", rig={"natural_frequency": 40.0, "delay": 0.002}, duration=12.0, rate=2000.0
    ),
    "delay of one and a half periods": Edge(rig={"delay": 0.5}),
    "delay of one and a half periods, sweep": Edge(rig={"delay": 0.5}, kind="sweep"),
    "delay of one and a half periods, steps": Edge(rig={"delay": 0.5}, kind="steps"),
    "input at 10 kHz, 25 frames/s": Edge(rate=10_000.0, sensor={"sample_rate": 25.0}),
    "input at 10 kHz, 25 frames/s, steps": Edge(kind="steps", rate=10_000.0, sensor={"sample_rate": 25.0}),
    "sensor reversed": Edge(rig={"gain": -12.0}),
    "sensor reversed on two clocks": Edge(rig={"gain": -12.0}, sensor=TWO_CLOCKS),
    "sensor reversed on two clocks, sweep": Edge(rig={"gain": -12.0}, kind="sweep", sensor=TWO_CLOCKS),
    "stamps rounded to 1 ms": Edge(sensor={"jitter": 0.001}, log=rounded(0.001)),
    "stamps rounded to 20 ms": Edge(sensor={"jitter": 0.001}, log=rounded(0.02)),
    "stamps rounded to 20 ms, sweep": Edge(kind="sweep", sensor={"jitter": 0.001}, log=rounded(0.02)),
    "frame numbers": Edge(sensor={"common_clock": False, "clock_offset": -0.3}, log=counted),
    "frame numbers, steps": Edge(kind="steps", sensor={"common_clock": False, "clock_offset": -0.3}, log=counted),
}


@pytest.mark.parametrize("name", EDGES)
def test_the_interval_holds_the_truth(name: str) -> None:
    """Four parameters over four seeds, the bounds at the top of this file."""
    edge = EDGES[name]
    drive, model = edge.drive(), edge.model
    sensor = SimulatedSensor(
        **{"sample_rate": 60.0, "exposure": 0.002, "noise": 0.3, "common_clock": True, **edge.sensor}  # type: ignore[arg-type]
    )
    truth = model.vector - np.array([0, 0, 0, sensor.clock_offset])
    squares, held, freedom = [], [], []
    for seed in range(SEEDS):
        run = SimulatedRig(model=model, sensor=sensor).run(
            drive, kind="response", name=name, rng=np.random.default_rng(seed)
        )
        found = identify(edge.log(run)).model
        assert found.undetermined == ()
        squares.append((found.model.vector - truth) ** 2 / np.diag(found.covariance))
        freedom.append(found.degrees_of_freedom)
        quantities = [q for q in found.parameters.values() if q is not None]
        held.append([q.interval_95[0] <= t <= q.interval_95[1] for q, t in zip(quantities, truth, strict=True)])
    assert np.all(np.mean(squares, axis=0) < fisher.ppf(1 - 1e-4, SEEDS, min(freedom)))
    assert np.all(np.sum(held, axis=0) >= 1)
