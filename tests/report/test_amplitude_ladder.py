"""One mark per run and per step, where its swing and its quantities put it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from report_rig import VANE, full_inputs, identification, quantity, step_result

from freqid.estimate.amplitude_dependence import DEPENDENT, AmplitudePoint, amplitude_dependence
from freqid.estimate.measured_amplitude import MeasuredAmplitude
from freqid.report import amplitude_figure, draw_report
from freqid.report.amplitude_ladder import rungs_of
from freqid.step_relations import logarithmic_decrement
from freqid.step_test.step_result import StepReading, StepResult


def steps_of(volts: list[float]) -> StepResult:
    """Steps of a linear vane: each has the decrement and the peak time of the vane itself."""
    damped = VANE.natural_frequency * np.sqrt(1 - VANE.damping_ratio**2)
    read = {
        "log_decrement": quantity(float(logarithmic_decrement(VANE.damping_ratio)), "1", 0.01),
        "peak_time": quantity(1 / (2 * damped), "s", 0.001),
    }
    steps = tuple(StepReading(time=3.0 * n, voltage_before=0.0, voltage_after=v, quantities=read)
                  for n, v in enumerate(volts))  # fmt: skip
    return replace(step_result(), steps=steps)


def test_steps_of_a_linear_rig_give_its_own_values() -> None:
    """Decrement and peak time go back to the vane's natural frequency and damping ratio, at gain times voltage."""
    rungs = rungs_of(None, steps_of([0.5, -1.0, 2.0]))
    assert [rung.swing for rung in rungs] == pytest.approx([6.0, 12.0, 24.0], rel=0.1)  # the fitted gain is near 12
    for rung in rungs:
        assert rung.natural_frequency is not None and rung.damping_ratio is not None
        assert rung.natural_frequency.value == pytest.approx(VANE.natural_frequency, rel=1e-9)
        assert rung.damping_ratio.value == pytest.approx(VANE.damping_ratio, rel=1e-9)


def test_uncertainties_are_those_of_the_scatter() -> None:
    """Drawing decrement and peak time at random scatters both quantities by what is stated."""
    rung = rungs_of(None, steps_of([0.5, 1.0]))[0]
    rng = np.random.default_rng(1)
    decrement = float(logarithmic_decrement(VANE.damping_ratio)) + 0.01 * rng.standard_normal(20000)
    zeta = decrement / np.sqrt(4 * np.pi**2 + decrement**2)
    peak = 1 / (2 * VANE.natural_frequency * np.sqrt(1 - VANE.damping_ratio**2)) + 1e-3 * rng.standard_normal(20000)
    frequency = 1 / (2 * peak * np.sqrt(1 - zeta**2))
    assert rung.natural_frequency is not None and rung.damping_ratio is not None
    # 20000 draws: their standard deviation is known to 0.5 %; first order misses less than (u / value)^2 = 1e-4
    assert rung.damping_ratio.standard_uncertainty == pytest.approx(np.std(zeta), rel=0.02)
    assert rung.natural_frequency.standard_uncertainty == pytest.approx(np.std(frequency), rel=0.02)


def test_nothing_is_drawn_where_all_swings_are_the_same() -> None:
    """Equal steps say nothing of amplitude: no rungs, no figure in the report."""
    assert rungs_of(None, steps_of([1.0, -1.0, 1.0])) == ()
    inputs = replace(full_inputs(), identification=None, step_result=steps_of([1.0, -1.0]))
    assert "amplitude_ladder" not in draw_report(inputs)


def test_runs_and_steps_stand_in_one_figure() -> None:
    """Two runs of different amplitude and two steps: four marks a row at their swings."""
    points = [
        AmplitudePoint(
            run=f"response-00{n}",
            amplitude=MeasuredAmplitude(rms_voltage=1.0 * n, rms_angle=4.0 * n, peak_angle=10.0 * n),
            quantities={name: quantity(1.0 + n, "1", 0.1) for name in DEPENDENT},
        )
        for n in (1, 2)
    ]
    dependence = amplitude_dependence(points, angle_unit="deg", degrees_of_freedom=50.0)
    model = replace(identification().model, amplitude=points[1].amplitude, dependence=dependence)
    rungs = rungs_of(model, steps_of([0.5, 1.5]))
    assert [rung.swing for rung in rungs if rung.source == "frequency_test"] == [10.0, 20.0]
    assert len(rungs) == 4
    upper, lower = amplitude_figure(rungs, angle_unit="deg").axes
    drawn = sorted(x for container in upper.containers for x in container.lines[0].get_xdata())
    assert drawn == pytest.approx(sorted(rung.swing for rung in rungs))
    assert lower.get_xlabel() == "largest swing (deg)" and "(Hz)" in upper.get_ylabel()
