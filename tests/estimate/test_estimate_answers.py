"""What a user is told by one estimate: the limits it bears, the sign, the doubts, and the refusals in one line."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from freqid.errors import EstimationError
from freqid.estimate.identification import Identification, identify
from freqid.records import AngleStream, InputStream, Run
from freqid.second_order import SecondOrder

Recorder = Callable[..., Run]


def codes_of(found: Identification) -> list[str]:
    """Codes of the caveats."""
    return [c.code for c in found.model.caveats]


def within(found: Identification, truth: np.ndarray, deviations: float = 5.0) -> bool:
    """All parameters within so many of their standard uncertainties."""
    return bool(
        np.all(np.abs(found.model.model.vector - truth) < deviations * np.sqrt(np.diag(found.model.covariance)))
    )


@pytest.mark.parametrize("kind", ["short_multisine", "short_sweep", "short_steps"])
@pytest.mark.parametrize("lost", [0.0, 0.3])
def test_any_excitation_with_and_without_lost_frames(
    kind: str, lost: float, request: pytest.FixtureRequest, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """The truth lies within five standard uncertainties; losing 30 % of the frames costs a factor near 1 / sqrt(0.7)
    = 1.2.

    An uncertainty whose noise rests on f degrees of freedom is itself known to 1 / sqrt(2 f): five of the two together.
    """
    drive = request.getfixturevalue(kind)
    whole = identify(recorded(drive, vane_model, noise=0.3, exposure=0.008, seed=3))
    found = identify(recorded(drive, vane_model, noise=0.3, exposure=0.008, seed=3, lost_frames=lost))
    assert within(found, vane_model.vector)
    wider = np.sqrt(np.diag(found.model.covariance) / np.diag(whole.model.covariance) * (1 - lost))
    known = 5 * np.sqrt(1 / (2 * found.model.degrees_of_freedom) + 1 / (2 * whole.model.degrees_of_freedom))
    assert np.all(np.abs(np.log(wider)) < known)


def test_no_delay_is_no_fault(short_sweep: InputStream, recorded: Recorder) -> None:
    """A best delay a little below zero is noise, not a contradiction: it is reported with its uncertainty."""
    model = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.0)
    for seed in range(4):
        found = identify(recorded(short_sweep, model, noise=0.3, seed=seed))
        assert within(found, model.vector)
        assert found.model.undetermined == ()


def test_an_impossible_delay_is_held_and_told(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """An angle 30 ms before its voltage, nearly two frames, on a common clock: the delay is not reported, the reason
    is.
    """
    run = recorded(short_sweep, vane_model, noise=0.3)
    found = identify(replace(run, angle=replace(run.angle, time=run.angle.time - 0.05)))
    assert found.model.parameters["delay"] is None
    assert found.model.undetermined == ("delay",)
    assert "delay_held_at_zero" in codes_of(found)


def test_a_noiseless_record_is_estimated_exactly(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Nothing divides by a noise of zero; the parameters are the true ones to 1e-6, every number finite."""
    found = identify(recorded(short_multisine, vane_model, exposure=0.008))
    np.testing.assert_allclose(found.model.model.vector, vane_model.vector, rtol=1e-6)
    np.testing.assert_allclose(found.response.response, vane_model.response(found.response.frequency), rtol=1e-6)
    assert np.all(np.isfinite(found.model.covariance))
    assert np.all(np.isfinite(found.response.variance))


# ---- sign ----


def reversed_rig(vane_model: SecondOrder) -> SecondOrder:
    """The vane with its sensor the other way round."""
    return replace(vane_model, gain=-12.0)


def test_a_reversed_sensor_on_two_clocks_is_told(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """With the onset in view the gain is negative and the user is asked about it."""
    found = identify(
        recorded(
            short_multisine,
            reversed_rig(vane_model),
            seed=1,
            noise=0.3,
            exposure=0.008,
            common_clock=False,
            clock_ratio=1.00015,
            clock_offset=-0.35,
        )
    )
    assert found.model.model.gain < 0
    assert "sensor_reversed" in codes_of(found)


@pytest.mark.parametrize(
    ("kind", "common"),
    [("short_multisine", True), ("short_sweep", True), ("short_sweep", False), ("short_steps", True)],
)
def test_a_reversed_sensor_is_told_whatever_the_test(
    kind: str, common: bool, request: pytest.FixtureRequest, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """A negative gain is as remarkable in a sweep or on a common clock."""
    clock = {} if common else {"clock_offset": -0.3}
    run = recorded(request.getfixturevalue(kind), reversed_rig(vane_model), noise=0.3, common_clock=common, **clock)
    found = identify(run)
    assert found.model.model.gain < 0
    assert "sensor_reversed" in codes_of(found)


def test_without_the_onset_the_sign_is_undetermined(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Frames of the steady part alone, odd lines, two clocks: a reversal looks like half a period, and that is said."""
    run = recorded(short_multisine, vane_model, seed=2, noise=0.3, common_clock=False, clock_offset=0.0)
    inside = (run.angle.time > 5.0) & (run.angle.time < 11.0)
    angle = replace(run.angle, time=run.angle.time[inside], angle=run.angle.angle[inside])
    assert "sign_undetermined" in codes_of(identify(replace(run, angle=angle)))


# ---- what is told and what is refused ----


def unrelated(drive: InputStream, *, seed: int) -> Run:
    """An angle that has nothing to do with the voltage."""
    angle = AngleStream(
        time=np.arange(1000) / 60,
        angle=np.random.default_rng(seed).standard_normal(1000),
        angle_unit="deg",
        exposure=0.0,
        stamp="end",
    )
    return Run(name="unrelated", kind="response", input=drive, angle=angle, common_clock=bool(seed % 2))


def test_noise_alone_is_called_poorly_explained(short_multisine: InputStream) -> None:
    """Numbers nobody should believe are called so."""
    found = identify(unrelated(short_multisine, seed=3))
    assert "poorly_explained" in codes_of(found)
    assert found.model.explained < 0.5


def test_noise_alone_never_ends_in_a_fault_of_the_program(short_multisine: InputStream) -> None:
    """Twelve unrelated angles: each is refused in one line, or answered with a doubt and a natural frequency below 1
    kHz.
    """
    for seed in range(12):
        try:
            found = identify(unrelated(short_multisine, seed=seed))
        except EstimationError:
            continue
        assert "poorly_explained" in codes_of(found)
        assert found.model.model.natural_frequency < 1000.0


def test_a_cubic_spring_is_inadequate(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """An angle bent by 1e-4 of its cube, 3 deg at 30 deg beside 0.1 deg of noise, is noticed, and the intervals
    widened.
    """
    run = recorded(short_multisine, vane_model, noise=0.1, seed=4)
    bent = replace(run, angle=replace(run.angle, angle=run.angle.angle - 1e-4 * run.angle.angle**3))
    plain, found = identify(run), identify(bent)
    assert "model_inadequate" in codes_of(found)
    assert np.all(np.diag(found.model.covariance) > 4 * np.diag(plain.model.covariance))


def test_both_methods_agree_on_a_multisine(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Told to forget the period, the estimate is another path to the same four numbers: within five joint
    uncertainties.
    """
    run = recorded(short_multisine, vane_model, noise=0.3, exposure=0.008, seed=5)
    one, other = identify(run, method="periodic"), identify(run, method="local-polynomial")
    assert (one.response.method, other.response.method) == ("periodic", "local-polynomial")
    joint = np.sqrt(np.diag(one.model.covariance) + np.diag(other.model.covariance))
    assert np.all(np.abs(one.model.model.vector - other.model.model.vector) < 5 * joint)


def test_a_period_that_is_not_known_cannot_be_asked_for(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """The run is named, and the method that serves."""
    run = recorded(short_sweep, vane_model, noise=0.3)
    with pytest.raises(EstimationError) as told:
        identify(run, method="periodic")
    assert str(told.value) == (f"{run.name}: the excitation is not known to be periodic: use --method local-polynomial")


def between(run: Run, start: float, stop: float) -> Run:
    """The frames with stamps in a stretch."""
    inside = (run.angle.time >= start) & (run.angle.time < stop)
    return replace(run, angle=replace(run.angle, time=run.angle.time[inside], angle=run.angle.angle[inside]))


@pytest.mark.parametrize(
    ("start", "stop", "message"),
    [
        (2.0, 2.3, "at least 20 are needed: record longer"),
        (2.0, 5.0, r"of the steady excitation, less than one period \(4 s\): record longer"),
        (0.0, 0.4, "check that input and angle belong together"),
    ],
)
def test_records_that_say_too_little_are_refused(
    start: float, stop: float, message: str, short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Too few frames, less than a period, nothing but the rest before the excitation: one line each."""
    run = between(recorded(short_multisine, vane_model, noise=0.3, seed=3), start, stop)
    with pytest.raises(EstimationError, match=message) as told:
        identify(run)
    assert "\n" not in str(told.value)


def test_too_many_lines_for_the_frames_are_refused(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """A sensor of 3 frames/s cannot carry 15 lines in 12 s."""
    with pytest.raises(EstimationError, match=r"36 frames cannot carry 15 lines: fewer lines"):
        identify(recorded(short_multisine, vane_model, noise=0.01, sample_rate=3.0))
