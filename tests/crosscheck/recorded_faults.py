"""Both tests of a vane with a fault planted: short records (a multisine of 14 s, four steps) on the voltage's clock.

Noise 0.1 deg of a swing of 27 unless told.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from two_tests import VANE, checked, frequency_test, step_test

from excitation import Limits, MultisineSettings, StepSettings, design_multisine, design_step_sequence
from freqid.capture.planted_faults import PlantedFaults
from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor, input_from_profile
from freqid.crosscheck.causes import probable_causes
from freqid.crosscheck.causes.mechanism_trials import Trials, try_mechanisms
from freqid.crosscheck.causes.recorded_tests import prepared_tests
from freqid.crosscheck.comparison_result import Cause
from freqid.crosscheck.evidence import Evidence, Recorded
from freqid.records import InputStream, Run, RunKind
from freqid.second_order import SecondOrder

MODEL = SecondOrder.from_vector(VANE)
LIMITS = Limits(voltage=5.0, slew_rate=500.0, angle=30.0)
RATE = 125.0


@lru_cache
def drives() -> dict[RunKind, InputStream]:
    """The voltages of both tests."""
    multisine = design_multisine(
        MultisineSettings(band=(0.5, 10.0), duration=14.0, sample_rate=RATE, limits=LIMITS, rigs=(MODEL,), period=4.0)
    )
    steps = design_step_sequence(StepSettings(sample_rate=RATE, limits=LIMITS, rigs=(MODEL,), duration=13.0))
    return {"response": input_from_profile(multisine), "step": input_from_profile(steps)}


def recorded(faults: PlantedFaults, where: str = "both", *, seed: int = 1, noise: float = 0.1) -> Recorded:
    """Both runs of the vane with the faults planted."""
    sensor = SimulatedSensor(sample_rate=60.0, exposure=0.004, noise=noise, common_clock=True)
    rig = SimulatedRig(model=MODEL, sensor=sensor, faults=faults, faults_in=where)  # type: ignore[arg-type]
    runs: dict[RunKind, Run] = {
        kind: rig.run(drive, kind=kind, name=f"{kind}-001", rng=np.random.default_rng([seed, i]))
        for i, (kind, drive) in enumerate(drives().items())
    }
    return Recorded(response_runs=(runs["response"],), step_runs=(runs["step"],))


def evidence(records: Recorded) -> Evidence:
    """The records with two results that agree, so that only the records speak."""
    model, step = frequency_test(), step_test()
    return Evidence(check=checked(model, step), model=model, step=step, recorded=records)


def causes(faults: PlantedFaults, where: str = "both") -> tuple[Cause, ...]:
    """What is named."""
    return probable_causes(evidence(recorded(faults, where)))


def trials(faults: PlantedFaults, where: str = "both") -> Trials:
    """The fits behind it."""
    return try_mechanisms(prepared_tests(evidence(recorded(faults, where))))
