"""Is the fault that is planted in the records the one that is named, with a picture and a test that settles it?"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from recorded_faults import causes, evidence, recorded

from freqid.capture.planted_faults import NO_FAULTS, PlantedFaults
from freqid.crosscheck.causes import probable_causes
from freqid.crosscheck.evidence import Recorded


@pytest.mark.parametrize(
    ("cause", "faults", "where"),
    [
        ("dry_friction", PlantedFaults(dry_friction=0.15), "both"),
        ("backlash", PlantedFaults(backlash=1.0), "both"),
        ("hardening_spring", PlantedFaults(spring_hardening=0.08, spring_angle=30.0), "both"),
        ("softening_spring", PlantedFaults(spring_hardening=-0.08, spring_angle=30.0), "both"),
        ("end_stop", PlantedFaults(end_stop=20.0), "both"),
        ("saturation", PlantedFaults(saturation=1.2), "both"),
        ("unequal_directions", PlantedFaults(gain_asymmetry=0.06), "both"),
        ("scale_error", PlantedFaults(angle_scale=1.06), "step"),
        ("time_scale", PlantedFaults(time_base_ppm=25_000), "step"),
        ("extra_pole", PlantedFaults(driver_pole=15.0), "both"),
        ("uncorrected_exposure", PlantedFaults(hidden_exposure=0.04), "both"),
        ("second_mode", PlantedFaults(second_mode_frequency=8.0, second_mode_gain=0.02), "both"),
        ("drift", PlantedFaults(drift=1.0), "both"),
        ("step_was_a_ramp", PlantedFaults(slew_limit=20.0), "step"),
        ("lost_frames", PlantedFaults(), "both"),
    ],
)
def test_the_planted_fault_is_named_first(cause: str, faults: PlantedFaults, where: str) -> None:
    """With evidence, a picture and the test that settles it."""
    if cause == "lost_frames":
        given = evidence(recorded(faults))
        clock = replace(given.model.clock, lost_frames=600, lost_at=np.arange(600.0))
        found = probable_causes(replace(given, model=replace(given.model, clock=clock)))
    else:
        found = causes(faults, where)
    assert found[0].cause == cause
    assert 0 < found[0].strength <= 1
    assert found[0].settling_test
    assert found[0].exhibit is not None or cause in ("scale_error", "time_scale")


def test_a_healthy_rig_is_not_accused() -> None:
    """Nothing is named."""
    assert probable_causes(evidence(recorded(NO_FAULTS))) == ()


def test_without_the_runs_the_records_are_silent() -> None:
    """Results that agree, and no raw run: nothing to say."""
    assert probable_causes(evidence(Recorded())) == ()
