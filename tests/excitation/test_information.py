"""Is the predicted uncertainty the one that the exact motion of the rig gives?"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from spring_vane import Vane

from excitation import (
    ExcitationError,
    Limits,
    MultisineSettings,
    Profile,
    SensorSettings,
    StepSettings,
    design_multisine,
    design_step_sequence,
    predicted_uncertainties,
)
from excitation.information import PARAMETER_ORDER, angle_dependences

RIG = Vane(delay=0.02)
SENSOR = SensorSettings(sample_rate=50.0, exposure=0.004, noise=0.3, clock_known=False)
RATE = 500.0


@pytest.fixture(params=["multisine", "step"])
def profile(request: pytest.FixtureRequest, limits: Limits) -> Profile:
    """A short profile of either kind, held at 500 samples per second."""
    if request.param == "step":
        return design_step_sequence(
            StepSettings(sample_rate=RATE, limits=limits, rigs=[RIG], duration=10.0, hold_time=4.0)
        )
    return design_multisine(
        MultisineSettings(
            band=(0.5, 8.0), duration=15.0, sample_rate=RATE, limits=limits, rigs=[RIG], phases="schroeder", grid="full"
        )
    )


def _read(rig: Vane, profile: Profile, sensor: SensorSettings) -> np.ndarray:
    """Angle averaged over the exposure that ends at each instant, from the exact integral of the motion: (N,)."""
    integral = rig.motion(profile)[:, 2]
    every, exposure = round(RATE / sensor.sample_rate), round(sensor.exposure * RATE)
    ends = every * np.arange(math.floor(profile.duration * sensor.sample_rate))
    return (integral[ends] - integral[np.maximum(ends - exposure, 0)]) / sensor.exposure


def _brute_force(profile: Profile, sensor: SensorSettings) -> np.ndarray:
    """Dependences by central differences of the exact motion, (N, 6)."""
    columns = []
    for name, shift in zip(PARAMETER_ORDER, (1e-3, 1e-4, 1e-4, 1 / RATE), strict=True):
        high = _read(replace(RIG, **{name: getattr(RIG, name) + shift}), profile, sensor)
        low = _read(replace(RIG, **{name: getattr(RIG, name) - shift}), profile, sensor)
        columns.append((high - low) / (2 * shift))
    every, exposure = round(RATE / sensor.sample_rate), round(sensor.exposure * RATE)
    angle = RIG.motion(profile)[:, 0]
    ends = every * np.arange(math.floor(profile.duration * sensor.sample_rate))
    slope = (angle[ends] - angle[np.maximum(ends - exposure, 0)]) / sensor.exposure
    return np.column_stack([*columns, np.ones(ends.size), slope * ends / RATE])


def test_dependences_against_brute_force(profile: Profile) -> None:
    """Every column agrees with differences of the exact motion."""
    ours, exact = angle_dependences(profile, RIG, SENSOR), _brute_force(profile, SENSOR)
    # differences of the delay by one sample of 2 ms: (2 pi f 2 ms)^2 / 6, 2.4e-4 at 3 Hz and 1.7e-3 at 8 Hz; others far
    # less; 1e-5 of the rms is cut off at high frequency
    for column in range(6):
        error = np.linalg.norm(ours[:, column] - exact[:, column]) / np.linalg.norm(exact[:, column])
        assert error < 2e-3, column


@pytest.mark.parametrize("clock_known", [True, False])
def test_uncertainties_against_brute_force(profile: Profile, clock_known: bool) -> None:
    """The inverse of the brute-force information gives the same covariance."""
    sensor = replace(SENSOR, clock_known=clock_known)
    exact = _brute_force(profile, sensor)[:, : 5 if clock_known else 6]
    covariance = sensor.noise**2 * np.linalg.inv(exact.T @ exact)[:4, :4]
    predicted = predicted_uncertainties(profile, RIG, sensor)
    deviations = np.sqrt(np.diag(covariance))
    # columns differ by 2e-3 at most; correlations below 0.9 here let that grow to 1 %
    ours = [predicted.gain, predicted.natural_frequency, predicted.damping_ratio, predicted.delay]
    np.testing.assert_allclose(ours, deviations, rtol=0.01)
    scale = np.outer(deviations, deviations)
    np.testing.assert_allclose(predicted.covariance / scale, covariance / scale, rtol=0, atol=0.02)


def test_least_squares_reaches_the_prediction(limits: Limits) -> None:
    """Over 300 seeds the scatter of a least-squares estimate is the predicted one."""
    settings = StepSettings(sample_rate=RATE, limits=limits, rigs=[RIG], duration=10.0, hold_time=4.0)
    profile = design_step_sequence(settings)
    sensor = replace(SENSOR, clock_known=True)
    exact = _brute_force(profile, sensor)[:, :5]
    noise = np.random.default_rng(8).normal(scale=sensor.noise, size=(exact.shape[0], 300))
    scatter = np.std(np.linalg.lstsq(exact, noise, rcond=None)[0][:4], axis=1)
    predicted = np.sqrt(np.diag(predicted_uncertainties(profile, RIG, sensor).covariance))
    # a standard deviation from 300 values is uncertain by 1 / sqrt(600) = 4.1 %: 4 of these, and the 1 % above
    np.testing.assert_allclose(scatter, predicted, rtol=0.175)


def test_noise_and_gain_scale_as_they_must(profile: Profile) -> None:
    """Twice the noise, twice every uncertainty; an unknown clock never helps."""
    quiet = predicted_uncertainties(profile, RIG, SENSOR)
    loud = predicted_uncertainties(profile, RIG, replace(SENSOR, noise=0.6))
    np.testing.assert_allclose(loud.covariance, 4 * quiet.covariance, rtol=1e-9)
    known = predicted_uncertainties(profile, RIG, replace(SENSOR, clock_known=True))
    assert np.all(np.diag(known.covariance) <= np.diag(quiet.covariance) * (1 + 1e-9))
    assert known.natural_frequency < quiet.natural_frequency


def test_relative_values_are_over_the_given_ones(profile: Profile) -> None:
    """Gain, natural frequency and damping ratio are relative, whatever their sign; the delay stays in s."""
    predicted = predicted_uncertainties(profile, RIG, SENSOR)
    relative = predicted.relative(gain=-12.0, natural_frequency=3.0, damping_ratio=0.12)
    assert list(relative) == list(PARAMETER_ORDER)
    assert relative["gain"] == predicted.gain / 12.0
    assert relative["damping_ratio"] == predicted.damping_ratio / 0.12
    assert relative["delay"] == predicted.delay


def test_encoder_without_exposure_is_the_limit_of_a_short_one(profile: Profile) -> None:
    """An exposure of a microsecond and none at all give the same covariance."""
    none = predicted_uncertainties(profile, RIG, replace(SENSOR, exposure=0.0)).covariance
    short = predicted_uncertainties(profile, RIG, replace(SENSOR, exposure=1e-6)).covariance
    # the average over 1 us shifts the angle by half of it: 2 pi 8 Hz 0.5 us = 3e-5 of itself, grown by correlation
    np.testing.assert_allclose(short, none, rtol=1e-3)


def test_what_determines_nothing_is_refused(limits: Limits) -> None:
    """A profile at rest, too few samples, and a voltage too slow to tell damping from delay are each told."""
    rest = Profile(voltage=np.zeros(1000), sample_rate=RATE, hold="zero-order", bias=0.0, kind="other")
    with pytest.raises(ExcitationError, match="does not depend on every parameter"):
        predicted_uncertainties(rest, RIG, SENSOR)
    short = Profile(voltage=np.ones(50), sample_rate=RATE, hold="zero-order", bias=0.0, kind="other")
    with pytest.raises(ExcitationError, match=r"5 samples in 0\.1 s"):
        predicted_uncertainties(short, RIG, SENSOR)
    # at 1/2000 Hz damping and delay both turn the phase in proportion to frequency, alike to (f / fn)^2 = 3e-8
    slow = 1 - np.cos(2 * np.pi * np.arange(10_000) / 10_000)
    with pytest.raises(ExcitationError, match="does not tell the four parameters apart"):
        predicted_uncertainties(
            Profile(voltage=slow, sample_rate=5.0, hold="smooth", bias=0.0, kind="other"),
            RIG,
            replace(SENSOR, sample_rate=1.0),
        )


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"sample_rate": 0.0}, "sample_rate is 0"),
        ({"exposure": -1e-3}, "exposure is -0.001"),
        ({"noise": 0.0}, "noise is 0"),
        ({"noise": math.nan}, "noise is nan"),
    ],
)
def test_impossible_sensors_are_refused(changes: dict[str, float], message: str) -> None:
    """Each impossible figure of the sensor is named."""
    with pytest.raises(ExcitationError, match=message):
        replace(SENSOR, **changes)
