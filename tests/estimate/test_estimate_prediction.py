"""Predicted angles against the rig in software, and every derivative against numerical differences."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from freqid.estimate.prediction import MotionParameters, angle_only, free_parameters, predict
from freqid.estimate.record import Record
from freqid.records import InputStream, Run
from freqid.second_order import SecondOrder

Recorder = Callable[..., Run]


@pytest.mark.parametrize("damping", [0.02, 0.12, 1.0, 2.4])
@pytest.mark.parametrize("exposure", [0.0, 0.008])
def test_prediction_at_the_truth_is_the_noiseless_record(
    damping: float, exposure: float, short_steps: InputStream, recorded: Recorder
) -> None:
    """With the true parameters nothing is left over; on a common clock to rounding."""
    model = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=damping, delay=0.02)
    record = Record.from_run(recorded(short_steps, model, exposure=exposure, stamp="middle", rest_angle=4.0))
    left = record.angle - angle_only(record, MotionParameters(model=model, rest_angle=4.0))
    np.testing.assert_allclose(left, 0.0, atol=1e-9)


@pytest.mark.parametrize(
    ("common", "commanded", "held", "expected"),
    [
        (True, True, None, (0, 1, 2, 3, 5)),
        (False, True, None, (0, 1, 2, 3, 4, 5)),
        (True, False, None, (0, 1, 2, 3, 5, 6, 7)),
        (True, True, 0.0, (0, 1, 2, 5)),
        (False, False, None, (0, 1, 2, 3, 4, 5, 6, 7)),
    ],
)
def test_free_parameters_follow_from_what_is_known(
    common: bool,
    commanded: bool,
    held: float | None,
    expected: tuple[int, ...],
    short_steps: InputStream,
    vane_model: SecondOrder,
    recorded: Recorder,
) -> None:
    """The clock ratio is open on separate clocks, the start for a measured voltage, the delay unless it is held."""
    run = recorded(replace(short_steps, commanded=commanded), vane_model, common_clock=common)
    record = replace(Record.from_run(run), held_delay=held)
    assert free_parameters(record) == expected
    prediction = predict(record, MotionParameters(model=vane_model))
    assert prediction.free == expected
    assert prediction.jacobian.shape == (len(record.stamp), len(expected))


@pytest.mark.parametrize("damping", [0.02, 0.12, 0.999, 2.4])
@pytest.mark.parametrize("exposure", [0.0, 0.008])
def test_jacobian_equals_numerical_differences(
    damping: float, exposure: float, short_multisine: InputStream, recorded: Recorder
) -> None:
    """Column by column, central differences of the prediction itself, every parameter of a measured log on its own
    clock.

    Gain, rest and start enter linearly. The angle's second derivative jumps with the staircase, so a difference over
    a lag of 2 h errs by up to h times half the greatest jump, wn^2 K 0.2 V, beside a rate of some wn K 0.3 V: h wn /
    3 = 6e-6 for h = 1e-6 s. Differences by natural frequency and damping ratio with 1e-5 of the value err by
    (1e-5 Q)^2 / 6 < 1e-7. The exposure on a clock of another ratio is 1e-3 shorter or longer in proportion: nothing
    of order 1.
    Bound: 5e-5 of the column's greatest.
    """
    model = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=damping, delay=0.02)
    run = recorded(replace(short_multisine, commanded=False), model, exposure=exposure, common_clock=False)
    # a clock that begins at 5 s: the lag then is 5 s more, and the zero of the stamps is not their beginning
    record = Record.from_run(replace(run, angle=replace(run.angle, time=run.angle.time + 5.0)))
    at = MotionParameters(
        model=replace(model, delay=5.02), clock_ratio=1.0003, rest_angle=1.0, start_angle=2.0, start_rate=-1.0
    )
    got = predict(record, at)
    steps = [1e-3, 3e-5, damping * 1e-5, 1e-6, 1e-7, 1e-3, 1e-3, 1e-3]
    for column, number in enumerate(got.free):
        moved = np.zeros(8)
        moved[number] = steps[number]
        high, low = (angle_only(record, MotionParameters.from_vector(at.vector + sign * moved)) for sign in (1.0, -1.0))
        expected = (high - low) / (2 * steps[number])
        scale = np.max(np.abs(expected))
        np.testing.assert_allclose(got.jacobian[:, column], expected, atol=5e-5 * scale, err_msg=f"parameter {number}")


def test_motion_at_the_start_is_a_free_decay(
    short_steps: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Before the voltage moves, start angle and rate alone are seen: the textbook decaying cosine."""
    record = Record.from_run(recorded(replace(short_steps, commanded=False), vane_model))
    p = MotionParameters(model=vane_model, start_angle=2.0, start_rate=0.5)
    first_move = short_steps.time[np.flatnonzero(np.diff(short_steps.voltage))[0]]
    before = record.stamp < first_move
    t = record.stamp[before] - record.stamp[0]
    wn, zeta = 2 * np.pi * 3.0, 0.12
    wd = wn * np.sqrt(1 - zeta**2)
    # start_rate is in units of wn: theta'(0) = wn * 0.5
    decay = np.exp(-zeta * wn * t)
    expected = decay * (2.0 * np.cos(wd * t) + (wn * 0.5 + zeta * wn * 2.0) / wd * np.sin(wd * t))
    assert before.sum() > 20
    np.testing.assert_allclose(angle_only(record, p)[before], expected, atol=1e-11)


def test_vector_keeps_all_eight() -> None:
    """There and back."""
    vector = np.array([12.0, 3.0, 0.12, 0.02, 1.0003, -1.0, 2.0, 0.5])
    np.testing.assert_array_equal(MotionParameters.from_vector(vector).vector, vector)


@pytest.mark.parametrize("damping", [0.02, 0.12])
def test_derivatives_hold_on_a_finely_sampled_voltage(
    damping: float, short_multisine: InputStream, recorded: Recorder
) -> None:
    """A smooth voltage of 8 kHz, as a converter records it: natural frequency and damping ratio to 1e-4 of the column.

    Against Richardson's extrapolation of central differences with steps of 1e-3 and half of it, error (1e-3 Q)^4.
    """
    time = np.arange(0, 17, 1 / 8000)
    voltage = np.interp(time, short_multisine.time, short_multisine.voltage)
    stream = replace(short_multisine, time=time, voltage=voltage, hold="smooth", periodicity=None)
    model = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=damping, delay=0.02)
    record = Record.from_run(recorded(stream, model))
    at = MotionParameters(model=model)
    got = predict(record, at).jacobian

    def central(number: int, step: float) -> np.ndarray:
        moved = np.zeros(8)
        moved[number] = step * at.vector[number]
        high, low = (angle_only(record, MotionParameters.from_vector(at.vector + s * moved)) for s in (1, -1))
        return (high - low) / (2 * moved[number])

    for number in (1, 2):
        expected = (4 * central(number, 5e-4) - central(number, 1e-3)) / 3
        assert np.max(np.abs(got[:, number] - expected)) < 1e-4 * np.max(np.abs(expected))
