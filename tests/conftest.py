"""Where do the tests find the open data, and what do the estimators' tests drive the vane with?

Open data: in `FREQID_OPEN_DATA`, else in `../shared/open_data` beside the checkout. The excitations are short, so
that a whole estimate takes a fraction of a second.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

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
from freqid.records import InputStream, Run
from freqid.second_order import SecondOrder


@pytest.fixture(scope="session")
def open_data() -> Path:
    """The folder of measured open data; the test is skipped where it is missing."""
    beside = Path(__file__).resolve().parents[2] / "shared" / "open_data"
    folder = Path(os.environ.get("FREQID_OPEN_DATA") or beside)
    if not folder.is_dir():
        pytest.skip(f"no open data in {folder}; set FREQID_OPEN_DATA to the folder that holds them")
    return folder


@pytest.fixture(scope="session")
def vane_model() -> SecondOrder:
    """12 deg/V, 3 Hz, damping ratio 0.12, delay 20 ms."""
    return SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)


@pytest.fixture(scope="session")
def short_multisine(vane_model: SecondOrder) -> InputStream:
    """Three periods of 4 s, odd lines from 0.75 to 7.75 Hz, rests at both ends: 16 s of staircase at 500 Hz."""
    limits = Limits(voltage=5.0, slew_rate=500.0, angle=30.0)
    settings = MultisineSettings(
        band=(0.5, 8.0),
        duration=17.0,
        sample_rate=500.0,
        limits=limits,
        rigs=(vane_model,),
        phases="schroeder",
        period=4.0,
        grid="odd",
    )
    return input_from_profile(design_multisine(settings))


@pytest.fixture(scope="session")
def short_sweep(vane_model: SecondOrder) -> InputStream:
    """A sweep from 0.5 to 8 Hz: 16 s of staircase at 500 Hz."""
    limits = Limits(voltage=5.0, slew_rate=500.0, angle=30.0)
    settings = SweptSineSettings(band=(0.5, 8.0), duration=16.0, sample_rate=500.0, limits=limits, rigs=(vane_model,))
    return input_from_profile(design_swept_sine(settings))


@pytest.fixture(scope="session")
def short_steps(vane_model: SecondOrder) -> InputStream:
    """Steps up and down about the operating point, each held until settled: 20 s of staircase at 500 Hz."""
    limits = Limits(voltage=5.0, slew_rate=500.0, angle=30.0)
    return input_from_profile(
        design_step_sequence(StepSettings(sample_rate=500.0, limits=limits, duration=20.0, rigs=(vane_model,)))
    )


@pytest.fixture(scope="session")
def recorded() -> Callable[..., Run]:
    """A function that drives a model and records it: 60 frames/s on a common clock, without noise, unless told."""

    def record(
        drive: InputStream, model: SecondOrder, *, seed: int = 0, rest_angle: float = 0.0, **sensor: object
    ) -> Run:
        facts: dict[str, object] = {"sample_rate": 60.0, "exposure": 0.0, "common_clock": True, **sensor}
        rig = SimulatedRig(model=model, sensor=SimulatedSensor(**facts), rest_angle=rest_angle)  # type: ignore[arg-type]
        return rig.run(drive, kind="response", name=f"seed {seed}", rng=np.random.default_rng(seed))

    return record
