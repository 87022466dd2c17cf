"""How close does the step fit come to the Cramér-Rao bound, and do its intervals hold the truth?

Three rigs, each with its own sensor: a lightly damped vane before a camera on its own clock, a pointer movement with an
encoder on the common clock, and a sluggish valve before a slow camera. Printed per rig and parameter: root-mean-square
error over the bound of the whole record (rest angle, and clock ratio on two clocks, unknown too), and the share of 95 %
intervals that hold the truth.

    python tests/benchmarks/step_fit.py [--seeds 300]
"""

from __future__ import annotations

import argparse
from dataclasses import dataclass

import numpy as np

from excitation.limits import Limits
from excitation.step_sequence import StepSettings, design_step_sequence
from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor, input_from_profile
from freqid.estimate.prediction import MotionParameters, predict
from freqid.estimate.record import Record
from freqid.records import Run
from freqid.second_order import PARAMETER_ORDER, SecondOrder
from freqid.step_test.evaluation import evaluate_steps

LIMITS = Limits(voltage=5.0, slew_rate=500.0, angle=30.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """A rig before its sensor, and how long each level is held."""

    name: str
    model: SecondOrder
    sensor: SimulatedSensor
    hold_time: float

    @property
    def truth(self) -> np.ndarray:
        """The parameters as the logs show them: the delay less the clock offset."""
        return np.asarray(self.model.vector - np.array([0, 0, 0, self.sensor.clock_offset]))


CASES = (
    Case(
        name="vane, camera on its own clock",
        model=SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02),
        sensor=SimulatedSensor(
            sample_rate=60.0, exposure=0.008, noise=0.3, jitter=0.001, lost_frames=0.02, clock_ratio=1.0002,
            clock_offset=-0.35,
        ),
        hold_time=3.0,
    ),
    Case(
        name="pointer, encoder on the common clock",
        model=SecondOrder(gain=20.0, natural_frequency=2.1, damping_ratio=0.6, delay=0.004),
        sensor=SimulatedSensor(sample_rate=200.0, exposure=0.0, noise=0.1, common_clock=True),
        hold_time=2.0,
    ),
    Case(
        name="valve, slow camera on its own clock",
        model=SecondOrder(gain=8.0, natural_frequency=1.0, damping_ratio=1.3, delay=0.05),
        sensor=SimulatedSensor(sample_rate=25.0, exposure=0.02, noise=0.05, clock_ratio=0.9999, clock_offset=0.2),
        hold_time=4.0,
    ),
)  # fmt: skip


def main() -> None:
    """Print the table, one rig after the other."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--seeds", type=int, default=300)
    n_seeds: int = parser.parse_args().seeds
    doubt, share = 100 / np.sqrt(2 * n_seeds), 100 * np.sqrt(0.05 * 0.95 / n_seeds)
    print(f"{n_seeds} seeds: rms error over the Cramér-Rao bound (known to {doubt:.0f} %), coverage of 95 % intervals "
          f"(known to {share:.1f} %)", flush=True)  # fmt: skip
    print(f"{'':38s}" + "".join(f"{name:>20s}" for name in PARAMETER_ORDER), flush=True)
    errors, held = [], []
    for case in CASES:
        one_error, one_held = _evaluated(case, n_seeds)
        _told(case.name, one_error, one_held)
        errors.append(one_error)
        held.append(one_held)
    _told("all", np.concatenate(errors), np.concatenate(held))


def _evaluated(case: Case, n_seeds: int) -> tuple[np.ndarray, np.ndarray]:
    """Errors over the bound, and whether the interval holds the truth, both (N, 4)."""
    rig = SimulatedRig(model=case.model, sensor=case.sensor)
    settings = StepSettings(sample_rate=500.0, limits=LIMITS, rigs=(case.model,), hold_time=case.hold_time)
    drive = input_from_profile(design_step_sequence(settings))
    errors, held = [], []
    for seed in range(n_seeds):
        run = rig.run(drive, kind="step", name=f"seed {seed}", rng=np.random.default_rng([seed, 11]))
        found = evaluate_steps(run)
        errors.append((found.model.vector - case.truth) / _bound(case, run))
        intervals = [found.parameters[name] for name in PARAMETER_ORDER]
        held.append([
            q is not None and q.interval_95[0] <= true <= q.interval_95[1]
            for q, true in zip(intervals, case.truth, strict=True)
        ])  # fmt: skip
    return np.array(errors), np.array(held)


def _bound(case: Case, run: Run) -> np.ndarray:
    """Cramér-Rao bound (standard deviations) of the four parameters for this record's instants and white noise."""
    parameters = MotionParameters(model=SecondOrder.from_vector(case.truth), clock_ratio=case.sensor.clock_ratio)
    jacobian = predict(Record.from_run(run), parameters).jacobian
    scale = np.linalg.norm(jacobian, axis=0)
    information = np.linalg.inv((jacobian / scale).T @ (jacobian / scale)) / np.outer(scale, scale)
    return np.asarray(case.sensor.noise * np.sqrt(np.diag(information))[:4])


def _told(name: str, errors: np.ndarray, held: np.ndarray) -> None:
    ratios, coverage = np.sqrt(np.mean(errors**2, axis=0)), 100 * np.mean(held, axis=0)
    cells = "".join(f"{ratio:11.3f} {share:6.1f} %" for ratio, share in zip(ratios, coverage, strict=True))
    print(f"{name:38s}{cells}", flush=True)


if __name__ == "__main__":
    main()
