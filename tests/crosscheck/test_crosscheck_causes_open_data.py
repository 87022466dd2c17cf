"""Why do the two tests of the DC motor disagree? Published: they were made at different operating points.

Source: the dc_motor data (terms in the README beside them).
"""

from __future__ import annotations

from pathlib import Path

from test_crosscheck_open_data import MOTOR

from freqid.capture.logs.import_settings import ImportSettings
from freqid.capture.logs.run_from_logs import run_from_one_log
from freqid.crosscheck.comparison import cross_check
from freqid.crosscheck.evidence import Recorded
from freqid.estimate.identification import identify
from freqid.estimate.resonance import read_resonance
from freqid.step_test.evaluation import evaluate_steps


def test_the_motor_was_tested_at_different_operating_points(open_data: Path) -> None:
    """Gain, natural frequency and damping all differ, each test alone is that of one rig: not a scale, not a clock."""
    folder = open_data / "dc_motor"
    sequence = run_from_one_log(
        folder / "binary_sequence.csv", settings=ImportSettings(angle_unit="deg"), rig=MOTOR
    )
    step = run_from_one_log(
        folder / "step.csv", settings=ImportSettings(kind="step", angle_unit="deg"), rig=MOTOR
    )
    found = identify(sequence)
    check = cross_check(
        found.model,
        evaluate_steps(step),
        tolerance={"gain": 0.05, "natural_frequency": 0.02, "damping_ratio": 0.10},
        resonance=read_resonance(found.response),
        recorded=Recorded(response_runs=(sequence,), step_runs=(step,), response=found.response),
    )
    assert check.verdict == "disagree"
    first = check.causes[0]
    assert first.cause == "operating_point"
    assert "mean 0.396 V" in first.evidence
    assert "mean 0.401 V" in first.evidence
    assert "[limits] bias" in first.settling_test
    others = [cause for cause in check.causes if cause.cause == "scale_error"]
    assert all(cause.strength < first.strength / 2 + 0.01 for cause in others)
