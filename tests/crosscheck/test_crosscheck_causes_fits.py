"""Are the mechanisms fitted as the theory of least squares says, and told apart no better than the records allow?"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from recorded_faults import evidence, recorded, trials
from two_tests import VANE, frequency_test, step_test

from freqid.capture.planted_faults import NO_FAULTS, PlantedFaults
from freqid.crosscheck.causes import probable_causes
from freqid.crosscheck.causes.mechanism_trials import NAMED, try_mechanisms
from freqid.crosscheck.causes.recorded_tests import prepared_tests
from freqid.crosscheck.causes.shared_fit import SharedRig
from freqid.crosscheck.evidence import Recorded
from freqid.records import Run


def test_no_mechanism_comes_near_a_healthy_rig() -> None:
    """Over three rigs the best score stays below the threshold."""
    best = [
        max((t.score for t in try_mechanisms(prepared_tests(evidence(recorded(NO_FAULTS, seed=s)))).found), default=0.0)
        for s in range(3)
    ]
    assert max(best) < NAMED


def test_its_size_is_found_within_its_uncertainty() -> None:
    """Friction of 0.15 deg, play of 1 deg, a pole at 15 Hz: within four standard uncertainties, and known to 20 %.

    The coarse steps of the fit may add what `STEP_ANGLE` says, a hundredth of the friction.
    """
    for faults, code, true in (
        (PlantedFaults(dry_friction=0.15), "dry_friction", 0.15),
        (PlantedFaults(backlash=1.0), "backlash", 1.0),
        (PlantedFaults(driver_pole=15.0), "extra_pole", 1 / (2 * np.pi * 15.0)),
    ):
        (found,) = [t for t in trials(faults).found if t.mechanism.code == code]
        size, uncertainty = found.fit.numbers[0], found.fit.uncertainty[0]
        assert uncertainty < 0.2 * true
        assert abs(size - true) < 4 * uncertainty + 0.01 * true


def test_one_run_alone_still_speaks() -> None:
    """Play shows in the step test alone; a scale error cannot."""
    both = recorded(PlantedFaults(backlash=1.0))
    found = probable_causes(evidence(Recorded(step_runs=both.step_runs)))
    assert found[0].cause == "backlash"
    tried = try_mechanisms(prepared_tests(evidence(Recorded(step_runs=both.step_runs)))).found
    assert "scale_error" not in {trial.mechanism.code for trial in tried}


def test_what_cannot_be_told_apart_is_said() -> None:
    """A little averaging and a little lag look alike: both are named, each says so and which test would settle it."""
    found = probable_causes(evidence(recorded(PlantedFaults(hidden_exposure=0.02), noise=0.3)))
    assert {"uncorrected_exposure", "extra_pole"} <= {cause.cause for cause in found[:3]}
    (pole,) = [cause for cause in found if cause.cause == "extra_pole"]
    assert "do not tell it from uncorrected exposure" in pole.against
    assert "terminals" in pole.settling_test


def test_the_joint_fit_of_a_healthy_rig_is_the_weighted_mean_of_both_fits() -> None:
    """Linear theory: information adds. The joint estimate of independent records is the information-weighted mean.

    Nonlinearity enters with the square of the errors, 1e-3 relative each: 1e-6, against standard errors of 1e-3.
    """
    tests = prepared_tests(evidence(recorded(NO_FAULTS)))
    joint = try_mechanisms(tests).healthy.parameters[0].vector[:3]
    information = [np.linalg.inv(test.covariance) for test in tests]
    moment = sum(i @ test.fit.parameters.vector[:3] for i, test in zip(information, tests, strict=True))
    np.testing.assert_allclose(joint, np.linalg.solve(sum(information), moment), rtol=2e-4)
    assert SharedRig(tests).n_frames == sum(len(test.record.stamp) for test in tests)


def test_the_unit_of_the_angle_does_not_matter() -> None:
    """Ten times the angle, ten times the noise: the same score."""
    records = recorded(PlantedFaults(backlash=1.0))
    scaled = Recorded(
        response_runs=tuple(tenfold(run) for run in records.response_runs),
        step_runs=tuple(tenfold(run) for run in records.step_runs),
    )
    given = evidence(scaled)
    vector = VANE * [10, 1, 1, 1]
    given = replace(given, model=frequency_test(vector), step=step_test(vector))
    first = try_mechanisms(prepared_tests(evidence(records))).found[0]
    second = try_mechanisms(prepared_tests(given)).found[0]
    assert second.mechanism.code == first.mechanism.code == "backlash"
    assert second.score == pytest.approx(first.score, rel=1e-3)


def tenfold(run: Run) -> Run:
    """The run with ten times the angle."""
    return replace(run, angle=replace(run.angle, angle=10 * run.angle.angle))
