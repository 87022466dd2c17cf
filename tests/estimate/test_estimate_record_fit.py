"""A noiseless record gives the true parameters; what the fit must not care about it does not care about."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from itertools import cycle, product

import numpy as np
import pytest

from excitation import Limits, MultisineSettings, SweptSineSettings, design_multisine, design_swept_sine
from freqid.capture.simulated_rig import input_from_profile
from freqid.estimate.prediction import MotionParameters
from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit, fit_record, refine
from freqid.estimate.starting_values import starting_values
from freqid.records import InputStream, Run
from freqid.second_order import SecondOrder

Recorder = Callable[..., Run]
RATIO, OFFSET = 1.0002, -0.35
SENSORS = cycle([(0.0, "end"), (0.008, "start"), (0.008, "middle"), (0.008, "end"), (0.0, "start")])
CASES = [
    (damping, kind, common, *next(SENSORS))
    for damping, kind, common in product(
        (0.02, 0.12, 0.5, 1.0, 2.4), ("short_multisine", "short_sweep", "short_steps"), (True, False)
    )
]


def fitted(run: Run) -> RecordFit:
    """The whole-record fit from the program's own starts."""
    return fit_record(Record.from_run(run))


def on_clock(common: bool) -> dict[str, object]:
    """Clock settings of the sensor."""
    return {"common_clock": True} if common else {"common_clock": False, "clock_ratio": RATIO, "clock_offset": OFFSET}


@pytest.mark.parametrize(("damping", "kind", "common", "exposure", "stamp"), CASES)
def test_a_noiseless_record_gives_the_true_parameters(
    damping: float,
    kind: str,
    common: bool,
    exposure: float,
    stamp: str,
    request: pytest.FixtureRequest,
    recorded: Recorder,
) -> None:
    """Without help at the start, for light and heavy damping, any excitation, clock, exposure and stamp.

    Staircase, simulation and fit are exact: 1e-6 relative is far above rounding. On a clock of its own the sensor's
    exposure is e = 2e-4 of itself longer in true time than the record says: the delay takes up e * 8 ms / 2 = 0.8 us
    of it; what no delay can mimic is (2 pi f 8 ms)^2 e / 12, 2.7e-6 at 8 Hz; heavy damping, told by the highest lines
    alone, magnifies it some four times: 1e-5.
    """
    model = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=damping, delay=0.02)
    facts = on_clock(common)
    run = recorded(request.getfixturevalue(kind), model, exposure=exposure, stamp=stamp, **facts)
    fit = fitted(run)
    scaled_exposure = not common and exposure > 0
    rel = 1e-5 if scaled_exposure else 1e-6
    np.testing.assert_allclose(fit.parameters.vector[:3], model.vector[:3], rtol=rel)
    lag = 0.02 - (0.0 if common else OFFSET)
    assert fit.parameters.model.delay == pytest.approx(lag, abs=2e-6 if scaled_exposure else 1e-6 * 0.02)
    assert fit.parameters.clock_ratio == pytest.approx(1.0 if common else RATIO, abs=1e-8)
    assert fit.explained > 1 - 1e-9


@pytest.mark.parametrize(("damping", "kind"), list(product((0.02, 0.5, 2.4), ("multisine", "sweep"))))
def test_a_noiseless_smooth_voltage_gives_the_true_parameters(damping: float, kind: str, recorded: Recorder) -> None:
    """The rig is driven by the voltage at 32 kHz, the record knows every 64th sample of it.

    Straight lines over an eighth of a sample weaken a line of f Hz by d(f) = (pi f / 4000)^2 / 3. Least squares turn
    that into a shift of the parameters which the model's sensitivities predict, line by line; 1e-6 relative beyond
    twice it for the spline.
    """
    limits, band = Limits(voltage=5.0, slew_rate=500.0, angle=30.0), (0.5, 8.0)
    facts = {"sample_rate": 32_000.0, "limits": limits, "hold": "smooth", "amplitude": 2.0}
    profile = (
        design_multisine(MultisineSettings(band=band, duration=17.0, phases="schroeder", period=4.0, **facts))
        if kind == "multisine"
        else design_swept_sine(SweptSineSettings(band=band, duration=16.0, **facts))
    )
    fine = input_from_profile(profile)
    model = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=damping, delay=0.02)
    run = recorded(fine, model, exposure=0.008)
    coarse = replace(fine, time=fine.time[::64], voltage=fine.voltage[::64])
    found = fitted(replace(run, input=coarse)).parameters.model.vector

    spectrum = np.abs(np.fft.rfft(coarse.voltage))
    f = np.fft.rfftfreq(len(coarse.voltage), 1 / 500)
    inside = (f > 0.1) & (f < 10)
    design = model.sensitivity(f[inside]) * spectrum[inside, None]
    weakened = model.response(f[inside]) * spectrum[inside] * (np.pi * f[inside] / 4000) ** 2 / 3
    shift, *_ = np.linalg.lstsq(
        np.concatenate([design.real, design.imag]), np.concatenate([weakened.real, weakened.imag]), rcond=None
    )
    allowed = 2 * np.abs(shift) + 1e-6 * np.abs(model.vector) + [0.0, 0.0, 0.0, 1e-6]
    assert np.all(np.abs(found - model.vector) < allowed)


def test_a_moving_start_is_fitted_along(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """A log that begins in the middle of the motion, its voltage measured, still gives the true parameters."""
    run = recorded(short_multisine, vane_model, exposure=0.008)
    late = slice(1000, None)
    source = replace(
        short_multisine,
        time=short_multisine.time[late],
        voltage=short_multisine.voltage[late],
        commanded=False,
        periodicity=None,
    )
    kept = run.angle.time > source.time[0] + 0.02 + 0.008  # whose exposure and delay lie inside the log
    seen = replace(run, input=source, angle=replace(run.angle, time=run.angle.time[kept], angle=run.angle.angle[kept]))
    fit = fitted(seen)
    np.testing.assert_allclose(fit.parameters.model.vector, vane_model.vector, rtol=1e-6)
    assert abs(fit.parameters.start_angle) > 0.1


@pytest.fixture(scope="module")
def noisy(short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder) -> Run:
    """One noisy record on a clock of its own."""
    return recorded(short_multisine, vane_model, noise=0.3, exposure=0.008, seed=7, **on_clock(False))


@pytest.fixture(scope="module")
def reference(noisy: Run) -> RecordFit:
    """Its fit."""
    return fitted(noisy)


# Levenberg-Marquardt stops when a step gains less than 1e-8 of the sum of squares, n s^2 with n = 1000: so close to the
# optimum that the sum differs by less than some 1e-5 s^2, that is sqrt(1e-5) = 0.003 standard uncertainties; twice that
# between two fits, and head-room
CLOSE = 0.02


def uncertainty(fit: RecordFit) -> np.ndarray:
    """Standard uncertainties for white noise, (P,)."""
    jacobian = fit.prediction.jacobian
    variance = fit.sum_of_squares / fit.degrees_of_freedom
    scale = 1 / np.linalg.norm(jacobian, axis=0)
    inverse = np.linalg.inv((jacobian * scale).T @ (jacobian * scale)) * np.outer(scale, scale)
    return np.asarray(np.sqrt(np.diag(inverse) * variance))[[0, 1, 2, 3]]


@pytest.mark.parametrize("factor", [np.pi / 180, 1000.0, -1.0])
def test_scaling_the_angle_scales_the_gain_alone(factor: float, noisy: Run, reference: RecordFit) -> None:
    """deg or rad, or a sensor the other way round: frequency, damping and delay do not notice."""
    scaled = replace(noisy, angle=replace(noisy.angle, angle=noisy.angle.angle * factor))
    found = fitted(scaled).parameters.model.vector / [factor, 1, 1, 1]
    assert np.all(np.abs(found - reference.parameters.model.vector) < CLOSE * uncertainty(reference))


def test_flipping_the_voltage_flips_the_gain(noisy: Run, reference: RecordFit) -> None:
    """With the rest before the excitation in view, the sign is the voltage's."""
    flipped = replace(noisy, input=replace(noisy.input, voltage=-noisy.input.voltage))
    found = fitted(flipped).parameters.model.vector * [-1, 1, 1, 1]
    assert np.all(np.abs(found - reference.parameters.model.vector) < CLOSE * uncertainty(reference))


def test_adding_a_bias_changes_nothing_but_the_rest(noisy: Run, reference: RecordFit) -> None:
    """Voltage counts from where it stood, angles from where they rested."""
    moved = replace(
        noisy,
        input=replace(noisy.input, voltage=noisy.input.voltage + 2.0),
        angle=replace(noisy.angle, angle=noisy.angle.angle + 40.0),
    )
    fit = fitted(moved)
    assert np.all(
        np.abs(fit.parameters.model.vector - reference.parameters.model.vector) < CLOSE * uncertainty(reference)
    )
    assert fit.parameters.rest_angle - reference.parameters.rest_angle == pytest.approx(40.0, abs=1e-3)


@pytest.mark.parametrize("shift", [7.3, -5.0, 1000.0])
def test_a_clock_set_elsewhere_moves_the_lag_by_as_much(shift: float, noisy: Run, reference: RecordFit) -> None:
    """lag = delay - offset: stamps later by s put the lag later by ratio * s, and change nothing else.

    Lag and ratio are correlated through the stamps' zero: the lag's own uncertainty is that of lag - ratio * (mean
    stamp).
    """
    late = replace(noisy, angle=replace(noisy.angle, time=noisy.angle.time + shift))
    fit = fitted(late)
    p, q = fit.parameters, reference.parameters
    assert np.all(np.abs(p.model.vector - q.model.vector)[:3] < CLOSE * uncertainty(reference)[:3])
    middle = float(np.mean(noisy.angle.time))
    lag_seen = p.model.delay - p.clock_ratio * (shift + middle)
    assert lag_seen == pytest.approx(q.model.delay - q.clock_ratio * middle, abs=CLOSE * uncertainty(reference)[3])


@pytest.mark.parametrize("share", [0.1, 0.3])
def test_frames_left_out_move_the_result_by_what_they_carried(share: float, noisy: Run, reference: RecordFit) -> None:
    """Without a share q of the frames the variance is 1 / (1 - q) times as large, and the move has the difference: q
    / (1 - q).

    Five standard deviations of that move for each of four parameters.
    """
    kept = np.random.default_rng(11).random(len(noisy.angle.time)) >= share
    fewer = replace(noisy, angle=replace(noisy.angle, time=noisy.angle.time[kept], angle=noisy.angle.angle[kept]))
    move = np.abs(fitted(fewer).parameters.model.vector - reference.parameters.model.vector)
    assert np.all(move < 5 * np.sqrt(share / (1 - share)) * uncertainty(reference))
    assert np.any(move > 0)


@pytest.mark.parametrize("delay", [0.0, 0.3])
def test_no_delay_and_a_long_one(delay: float, short_sweep: InputStream, recorded: Recorder) -> None:
    """A delay of nothing, and one of a whole period of the resonance, both without noise."""
    model = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=delay)
    found = fitted(recorded(short_sweep, model, exposure=0.008)).parameters.model
    np.testing.assert_allclose(found.vector[:3], model.vector[:3], rtol=1e-6)
    assert found.delay == pytest.approx(delay, abs=1e-8)


@pytest.mark.parametrize("common", [True, False])
def test_a_reversed_sensor_with_the_onset_in_view_has_a_negative_gain(
    common: bool, short_multisine: InputStream, recorded: Recorder
) -> None:
    """Odd lines only, yet the rest before the excitation tells a reversal from a shift of half a period."""
    model = SecondOrder(gain=-12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
    found = fitted(recorded(short_multisine, model, noise=0.3, seed=2, **on_clock(common))).parameters.model
    assert found.gain == pytest.approx(-12.0, rel=0.02)  # six standard uncertainties of 0.02 in 12 are 1 %
    assert found.delay == pytest.approx(0.02 if common else 0.02 - OFFSET, abs=0.002)


def test_starts_lie_in_the_basin(noisy: Run) -> None:
    """The best start explains most of the record and is a short walk from the truth, on any clock."""
    best = starting_values(Record.from_run(noisy))[0]
    assert best.explained > 0.5
    assert abs(np.log(best.model.natural_frequency / 3.0)) < np.log(1.15)  # one step of the bank
    assert abs(best.model.delay - (0.02 - OFFSET)) < 0.25 / 3.0  # a quarter of a period


def test_refinement_of_the_truth_stays_there(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Started at the true parameters of a noiseless record, the fit has nothing to do."""
    record = Record.from_run(recorded(short_sweep, vane_model))
    fit = refine(record, MotionParameters(model=vane_model))
    assert fit is not None
    np.testing.assert_allclose(fit.parameters.model.vector, vane_model.vector, rtol=1e-9)
    assert fit.degrees_of_freedom == len(record.stamp) - 5
