"""The response at the lines against closed forms, the plain DFT of a steady record, and its own claimed variance."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from freqid.errors import EstimationError
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.noise_spectrum import NoiseSpectrum
from freqid.estimate.periodic import LineRegression, line_amplitudes, periodic_response, steady_noise
from freqid.estimate.prediction import MotionParameters
from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit, refine
from freqid.held_response import Drive, HeldResponse
from freqid.records import AngleStream, InputStream, Periodicity, Run
from freqid.second_order import SecondOrder

Recorder = Callable[..., Run]
LINES = np.array([0.5, 1.25, 3.0, 7.75])
AMPLITUDES = np.array([1.0, 0.5 - 0.3j, -0.2j, 0.4 + 0.1j])


def response_at_lines(record: Record, fit: RecordFit) -> FrequencyResponse:
    """Response of a record around its fit."""
    measured, _ = periodic_response(record, fit, LineRegression.of(record, fit))
    return measured


def noise_between(record: Record, fit: RecordFit) -> NoiseSpectrum | None:
    """Noise of a record between its harmonics."""
    return steady_noise(record, fit, LineRegression.of(record, fit))


def samples(time: np.ndarray) -> np.ndarray:
    """The multisine of LINES and AMPLITUDES, V."""
    return np.real(np.exp(2j * np.pi * np.outer(time, LINES)) @ AMPLITUDES)


@pytest.fixture
def periodicity() -> Periodicity:
    """Two periods of 4 s that begin at 1 s."""
    return Periodicity(period=4.0, lines=LINES, start=1.0, stop=9.0)


def test_a_staircase_holds_the_closed_form(periodicity: Periodicity) -> None:
    """A held sample weakens a line by sinc(f T) and delays it by T / 2, exactly; rounding only."""
    drive = Drive.from_samples(samples(np.arange(1000) / 100), start=0.0, interval=0.01, smooth=False)
    expected = AMPLITUDES * np.sinc(LINES * 0.01) * np.exp(-1j * np.pi * LINES * 0.01)
    np.testing.assert_allclose(line_amplitudes(drive, periodicity), expected, atol=1e-12)


@pytest.mark.parametrize("smooth", [False, True])
@pytest.mark.parametrize("start", [0.0, 0.13])
def test_amplitudes_equal_the_fourier_integral(smooth: bool, start: float, periodicity: Periodicity) -> None:
    """Brute force: the voltage between its samples integrated over one period with 50 points a sample.

    The midpoint rule errs by (2 pi f h)^2 / 24 of a line with h = 0.2 ms, 4e-6 at 7.75 Hz; at the jumps by nothing, for
    they lie between midpoints. The jumps' own spread counts as much again: 1e-5.
    """
    voltage = np.cumsum(np.random.default_rng(1).normal(size=400))
    voltage = np.tile(voltage - np.linspace(0, voltage[-1], 400), 3)
    drive = Drive.from_samples(voltage, start=start, interval=0.01, smooth=smooth)
    steady = replace(periodicity, start=start + 1.0, stop=start + 9.0)
    instants = start + 1.0 + (np.arange(20_000) + 0.5) * 2e-4
    index, since = drive.locate(instants)
    value = drive.value[index] + drive.slope[index] * since
    expected = 2 * np.mean(value * np.exp(-2j * np.pi * np.outer(LINES, instants)), axis=1)
    np.testing.assert_allclose(line_amplitudes(drive, steady), expected, atol=1e-5 * np.ptp(voltage))


def test_a_smooth_record_holds_its_lines(short_multisine: InputStream, periodicity: Periodicity) -> None:
    """Refined eight times by a spline, straight lines weaken a line by (pi f T / 8)^2 / 3, 5e-5 at 7.75 Hz and 100 Hz.

    The spline itself errs by less than (2 pi f T)^4 / 384, 1.5e-4 at 7.75 Hz; its end intervals lie outside the
    steady part.
    """
    time = np.arange(1000) / 100
    stream = replace(short_multisine, time=time, voltage=samples(time), hold="smooth", periodicity=periodicity)
    frames = np.arange(300) / 30
    run = Run(
        name="smooth",
        kind="response",
        input=stream,
        angle=plain_angle(frames, samples(frames)),
        common_clock=True,
    )
    got = line_amplitudes(Record.from_run(run).drive, periodicity)
    assert np.all(
        np.abs(got / AMPLITUDES - 1) < (np.pi * LINES / 800) ** 2 / 3 + (2 * np.pi * LINES / 100) ** 4 / 384 + 1e-9
    )


def plain_angle(time: np.ndarray, angle: np.ndarray) -> AngleStream:
    """Angles without exposure."""
    return AngleStream(time=time, angle=angle, angle_unit="deg", exposure=0.0, stamp="end")


def test_a_period_between_samples_is_refused(periodicity: Periodicity) -> None:
    """Half a sample too long: the voltage cannot be folded, and the other method is named."""
    drive = Drive.from_samples(samples(np.arange(1000) / 100), start=0.0, interval=0.01, smooth=False)
    with pytest.raises(EstimationError) as told:
        line_amplitudes(drive, replace(periodicity, period=4.005))
    assert str(told.value) == (
        "the period (4.005 s) is not a whole number of input samples (400.500): use --method local-polynomial"
    )


# ---- the response itself ----


def two_modes(drive: Drive, time: np.ndarray, exposure: float = 0.0) -> np.ndarray:
    """Angle of a rig that is not second order: a second resonance rides on the first."""
    first, second = (HeldResponse(drive, fn, zeta).mean(time, exposure) for fn, zeta in ((3.0, 0.2), (6.0, 0.25)))
    return np.asarray(12.0 * first + 3.0 * second)


def two_modes_response(f: np.ndarray) -> np.ndarray:
    """Its frequency response."""
    return sum(
        SecondOrder(gain=k, natural_frequency=fn, damping_ratio=zeta).response(f)
        for k, fn, zeta in ((12.0, 3.0, 0.2), (3.0, 6.0, 0.25))
    )


@pytest.fixture(scope="module")
def other_rig(short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder) -> Record:
    """Its noiseless record, from 5.5 s on, where the start has died away (exp(-0.2 * 6 pi * 4.5) = 4e-8)."""
    record = Record.from_run(recorded(short_multisine, vane_model))
    late = record.stamp >= 5.5 - 1e-9
    return replace(record, stamp=record.stamp[late], angle=two_modes(record.drive, record.stamp[late]))


def around(record: Record) -> RecordFit:
    """A second-order fit from near by."""
    fit = refine(
        record, MotionParameters(model=SecondOrder(gain=14.0, natural_frequency=3.0, damping_ratio=0.2, delay=0.001))
    )
    assert fit is not None
    return fit


def test_a_steady_record_gives_the_plain_dft_ratio(other_rig: Record) -> None:
    """Two whole periods on a uniform grid: discrete Fourier transform of the angle over the amplitudes of the voltage.

    What the regression adds (drift, decay) vanishes on a noiseless steady record but for the start's last 4e-8 of 30
    deg and the staircase's images near 500 Hz, weakened by (fn / 500)^2 and sinc, some 1e-7 deg; lines are 0.2 V:
    1e-5 deg/V.
    """
    response = response_at_lines(other_rig, around(other_rig))
    inside = other_rig.stamp < 13.5 - 1e-9
    t, f = other_rig.stamp[inside], response.frequency
    assert inside.sum() == 480
    amplitude = 2 * np.mean(other_rig.angle[inside] * np.exp(-2j * np.pi * np.outer(f, t)), axis=1)
    plain = amplitude / line_amplitudes(other_rig.drive, other_rig.periodicity)
    np.testing.assert_allclose(response.response, plain, atol=1e-5)
    np.testing.assert_allclose(response.response, two_modes_response(f), atol=1e-5)


def test_lost_frames_do_not_disturb_a_noiseless_response(other_rig: Record) -> None:
    """Regression at the true instants needs no grid: with 30 % of the frames gone the answer is the same."""
    kept = np.random.default_rng(2).random(len(other_rig.stamp)) >= 0.3
    fewer = replace(other_rig, stamp=other_rig.stamp[kept], angle=other_rig.angle[kept])
    response = response_at_lines(fewer, around(fewer))
    np.testing.assert_allclose(response.response, two_modes_response(response.frequency), atol=1e-4)


def test_exposure_is_taken_out(other_rig: Record) -> None:
    """The mean over 8 ms weakens and delays a line; the response is that of the rig."""
    blurred = replace(other_rig, exposure=0.008, angle=two_modes(other_rig.drive, other_rig.stamp, 0.008))
    response = response_at_lines(blurred, around(blurred))
    np.testing.assert_allclose(response.response, two_modes_response(response.frequency), atol=1e-5)


def test_the_start_up_transient_is_taken_out(short_multisine: InputStream, recorded: Recorder) -> None:
    """A rig that rings for the whole record (zeta 0.005) still shows its steady response."""
    model = SecondOrder(gain=12.0, natural_frequency=3.1, damping_ratio=0.005, delay=0.02)
    record = Record.from_run(recorded(short_multisine, model))
    fit = refine(record, MotionParameters(model=replace(model, damping_ratio=0.0055, gain=11.5)))
    assert fit is not None
    response = response_at_lines(record, fit)
    np.testing.assert_allclose(response.response, model.response(response.frequency), rtol=1e-6)


SEEDS = 40


def test_claimed_variance_is_the_scatter(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Over 40 seeds, error squared over claimed variance is one on average, at every line and over all.

    One line and seed: |error|^2 / variance is Fisher's F with 2 and f degrees, mean f / (f - 2), variance about 1. So
    the mean of 40 has a standard deviation of 0.17; five of them at each of 15 lines; over all lines 5 sqrt(1 / 600 +
    2 / (40 f)).
    """
    ratio = []
    for seed in range(SEEDS):
        record = Record.from_run(recorded(short_multisine, vane_model, noise=0.3, exposure=0.008, seed=seed))
        fit = refine(record, MotionParameters(model=vane_model), evaluations=6)
        assert fit is not None
        response = response_at_lines(record, fit)
        ratio.append(np.abs(response.response - vane_model.response(response.frequency)) ** 2 / response.variance)
    freedom = float(response.degrees_of_freedom.min())
    expected = freedom / (freedom - 2)
    per_line = np.mean(ratio, axis=0)
    assert np.max(np.abs(per_line - expected)) < 5 * 1.1 / np.sqrt(SEEDS)
    assert np.mean(ratio) == pytest.approx(expected, abs=5 * np.sqrt(1 / (15 * SEEDS) + 2 / (SEEDS * freedom)))


def test_coherence_is_between_nothing_and_one_and_falls_with_noise(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """More noise, less coherence, at every line."""
    found = []
    for noise in (0.1, 3.0):
        record = Record.from_run(recorded(short_multisine, vane_model, noise=noise, seed=1))
        fit = refine(record, MotionParameters(model=vane_model))
        assert fit is not None
        found.append(response_at_lines(record, fit).coherence)
    assert np.all(found[1] > 0)
    assert np.all(found[0] <= 1)
    assert np.all(found[0] > found[1])


def test_a_single_period_with_nearly_every_harmonic_says_how_the_noise_was_taken(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """120 frames have 60 bins; with 44 of them excited fewer than 20 are free, and the user is told what was done
    instead.
    """
    record = Record.from_run(recorded(short_multisine, vane_model, noise=0.3, seed=1, sample_rate=30.0))
    fit = refine(record, MotionParameters(model=vane_model))
    assert fit is not None
    sparse = replace(record, periodicity=Periodicity(period=4.0, lines=np.arange(1, 21) / 4.0, start=1.5, stop=5.5))
    assert noise_between(sparse, fit) is not None
    assert response_at_lines(sparse, fit).caveats == ()
    dense = replace(record, periodicity=Periodicity(period=4.0, lines=np.arange(1, 45) / 4.0, start=1.5, stop=5.5))
    assert noise_between(dense, fit) is None
    assert [c.code for c in response_at_lines(dense, fit).caveats] == ["noise_assumed_white"]


# ---- refusals ----


def cut(run: Run, start: float, stop: float) -> Run:
    """Frames between two stamps."""
    inside = (run.angle.time >= start) & (run.angle.time < stop)
    return replace(run, angle=replace(run.angle, time=run.angle.time[inside], angle=run.angle.angle[inside]))


def test_less_than_one_period_is_refused(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Says how much was covered, how much is needed, and what to do."""
    record = Record.from_run(cut(recorded(short_multisine, vane_model), 2.0, 5.0))
    fit = refine(record, MotionParameters(model=vane_model))
    assert fit is not None
    with pytest.raises(
        EstimationError,
        match=r"^the angle log covers 3(\.\d+)? s of the steady excitation, less than one "
        r"period \(4 s\): record longer$",
    ):
        response_at_lines(record, fit)


def test_too_many_lines_for_the_frames_are_refused(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Fifteen lines and what goes with them are 34 unknowns; 36 frames cannot carry them."""
    record = Record.from_run(recorded(short_multisine, vane_model, sample_rate=3.0))
    fit = refine(record, MotionParameters(model=vane_model))
    assert fit is not None
    with pytest.raises(EstimationError) as told:
        response_at_lines(record, fit)
    assert (
        str(told.value) == "36 frames cannot carry 15 lines: fewer lines (narrower band, odd grid) or a longer record"
    )


def test_an_excitation_of_unknown_period_is_refused(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """A sweep has no lines; the method that serves is named."""
    record = Record.from_run(recorded(short_sweep, vane_model))
    fit = refine(record, MotionParameters(model=vane_model))
    assert fit is not None
    with pytest.raises(EstimationError, match="not known to be periodic: use --method local-polynomial"):
        response_at_lines(record, fit)
