"""The straight line of JCGM 100 H.3, and quantities against amplitude: trends found, none invented, words."""

from __future__ import annotations

import numpy as np
import pytest

from freqid.estimate.amplitude_dependence import (
    DEPENDENT,
    AmplitudeDependence,
    AmplitudePoint,
    amplitude_dependence,
    fit_line,
)
from freqid.estimate.measured_amplitude import MeasuredAmplitude, mean_amplitude
from freqid.quantity import Quantity

# JCGM 100:2008, H.3, Table H.6 (confirmed): reading of the thermometer, observed correction
TEMPERATURE = np.array([21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511])
CORRECTION = -np.array([0.171, 0.169, 0.166, 0.159, 0.164, 0.165, 0.156, 0.157, 0.159, 0.161, 0.160])


def test_the_calibration_line_of_the_gum() -> None:
    """H.3: intercept -0.1712 (u 0.0029) at 20 C, slope 0.00218 (u 0.00067), correlation -0.930, s = 0.0035, and the
    predicted correction at 30 C, -0.1494 (u 0.0041); half a unit of the last digit printed.

    The uncertainty of each point is the scatter about the line, s = 0.0034976 by an independent computation: printed as
    0.0035, which the chi-square of nine degrees confirms.
    """
    deviation = 0.0034976
    line = fit_line(TEMPERATURE - 20, CORRECTION, np.full(11, deviation))
    rest = CORRECTION - line.intercept - line.slope * (TEMPERATURE - 20)
    own = np.sqrt(np.diag(line.covariance))
    at_30 = np.array([1.0, 10.0])
    assert np.sqrt(rest @ rest / 9) == pytest.approx(0.0035, abs=5e-5)
    assert line.intercept == pytest.approx(-0.1712, abs=5e-5)
    assert line.slope == pytest.approx(0.00218, abs=5e-6)
    assert own[0] == pytest.approx(0.0029, abs=5e-5)
    assert own[1] == pytest.approx(0.00067, abs=5e-6)
    assert line.covariance[0, 1] / own.prod() == pytest.approx(-0.930, abs=5e-4)
    assert line.intercept + 10 * line.slope == pytest.approx(-0.1494, abs=5e-5)
    assert np.sqrt(at_30 @ line.covariance @ at_30) == pytest.approx(0.0041, abs=5e-5)
    assert line.degrees_of_freedom == np.inf


def test_points_that_scatter_more_than_they_claim_enlarge_the_line() -> None:
    """Claimed ten times too small, H.3's points bring their own scatter: the same uncertainties, nine degrees."""
    line = fit_line(TEMPERATURE - 20, CORRECTION, np.full(11, 0.00034976))
    assert np.sqrt(np.diag(line.covariance)) == pytest.approx([0.0028776, 0.00066794], rel=2e-4)
    assert line.degrees_of_freedom == 9


def points(values: np.ndarray, uncertainty: np.ndarray, *, voltage: np.ndarray) -> list[AmplitudePoint]:
    """Runs at rms voltages (N,) of a rig of about 10 deg/V with quantities (N, 3)."""
    return [
        AmplitudePoint(
            run=f"response-{number:03d}",
            amplitude=MeasuredAmplitude(rms_voltage=v, rms_angle=10 * v, peak_angle=25 * v),
            quantities={
                name: Quantity.normal(x, unit, u)
                for name, unit, x, u in zip(DEPENDENT, ("deg/V", "Hz", "1"), row, uncertainty, strict=True)
            },
        )
        for number, (v, row) in enumerate(zip(voltage, values, strict=True))
    ]


TRUE = np.array([12.0, 3.0, 0.12])
CLAIMED = np.array([0.02, 0.002, 0.001])


def test_a_stiffening_spring_is_found_and_told() -> None:
    """3.000 Hz at 0.2 V rms, 3.060 Hz at 1 V: a change of 2 %, the slope over 8 deg; no other change is told."""
    values = TRUE + np.outer([0.0, 0.03, 0.06], [0.0, 1.0, 0.0])
    found = amplitude_dependence(
        points(values, CLAIMED, voltage=np.array([0.2, 0.6, 1.0])), angle_unit="deg", degrees_of_freedom=60
    )
    assert found is not None
    gain, frequency, damping = found.trends
    assert frequency.significant and not gain.significant and not damping.significant
    assert frequency.slope.value == pytest.approx(0.06 / 8)
    assert frequency.slope.unit == "Hz/deg"
    assert frequency.change.value == pytest.approx(0.02)
    assert [caveat.message for caveat in found.caveats("deg")] == [
        "The natural frequency rises 2 % from 2 to 10 deg rms (0.2 to 1 V rms): the spring hardens."
    ]
    assert AmplitudeDependence.from_json(found.as_json()) == found


def test_runs_of_one_amplitude_say_nothing_about_amplitude() -> None:
    """1 and 1.15 V rms are taken as the same amplitude."""
    runs = points(np.array([TRUE, TRUE * 1.1]), CLAIMED, voltage=np.array([1.0, 1.15]))
    assert amplitude_dependence(runs, angle_unit="deg", degrees_of_freedom=60) is None
    assert amplitude_dependence(runs[:1], angle_unit="deg", degrees_of_freedom=60) is None


def test_change_and_its_uncertainty_are_those_of_two_points() -> None:
    """Two runs: the line passes through both, so the change is b/a - 1 and its relative uncertainty follows from both:
    u = (b/a) sqrt((u_a/a)^2 + (u_b/b)^2), the closed form of a ratio.
    """
    values = np.array([TRUE, TRUE * 1.05])
    found = amplitude_dependence(
        points(values, CLAIMED, voltage=np.array([0.5, 1.0])), angle_unit="deg", degrees_of_freedom=np.inf
    )
    assert found is not None
    for trend, value, u in zip(found.trends, TRUE, CLAIMED, strict=True):
        assert trend.change.value == pytest.approx(0.05)
        expected = 1.05 * np.hypot(u / value, u / (1.05 * value))
        assert trend.change.standard_uncertainty == pytest.approx(expected)


def test_no_dependence_is_invented() -> None:
    """1000 sets of three runs of a straight rig: any of the three called significant in 1 %, within five of
    sqrt(0.01 * 0.99 / 1000) = 0.31 %. (The chi-square of one degree enlarges 5 % of the sets, which makes it rarer.)
    """
    rng, called = np.random.default_rng(5), 0
    for _ in range(1000):
        values = TRUE + CLAIMED * rng.standard_normal((3, 3))
        found = amplitude_dependence(
            points(values, CLAIMED, voltage=np.array([0.2, 0.6, 1.0])), angle_unit="deg", degrees_of_freedom=np.inf
        )
        assert found is not None
        called += found.significant
    assert called / 1000 < 0.01 + 5 * 0.0031
    assert called / 1000 > 0.0


def test_amplitudes_of_several_runs() -> None:
    """Root mean squares, and the largest peak."""
    runs = [MeasuredAmplitude(rms_voltage=v, rms_angle=10 * v, peak_angle=25 * v) for v in (3.0, 4.0)]
    mean = mean_amplitude(runs)
    assert mean.rms_voltage == pytest.approx(np.sqrt(12.5))
    assert mean.rms_angle == pytest.approx(10 * np.sqrt(12.5))
    assert mean.peak_angle == 100
    assert MeasuredAmplitude.from_json(mean.as_json()) == mean
