"""The whole estimate: what it claims about its uncertainty over many seeds, what it tells the user, and what it
refuses.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import pytest
from scipy.stats import binom, kstest

from freqid.errors import EstimationError
from freqid.estimate.combination import combine
from freqid.estimate.identification import Identification, identify
from freqid.records import AngleStream, InputStream, Run
from freqid.second_order import PARAMETER_ORDER, SecondOrder

Recorder = Callable[..., Run]
SEEDS = 40
CHANCE = 1e-4
SENSOR = {
    "common_clock": False,
    "clock_ratio": 1.00015,
    "clock_offset": -0.35,
    "exposure": 0.008,
    "jitter": 0.001,
    "lost_frames": 0.02,
    "noise": 0.3,
}


@dataclass(frozen=True, slots=True)
class Campaign:
    """Forty estimates of one rig on two clocks."""

    found: list[Identification]
    truth: np.ndarray


@pytest.fixture(scope="module")
def campaign(short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder) -> Campaign:
    """One estimate a seed; the delay contains the offset."""
    found = [identify(recorded(short_multisine, vane_model, seed=seed, **SENSOR)) for seed in range(SEEDS)]
    return Campaign(found, vane_model.vector + np.array([0, 0, 0, 0.35]))


def test_intervals_hold_the_truth(campaign: Campaign) -> None:
    """Of 160 intervals of 95 % at least as many hold the truth as chance allows at 1e-4; so for each parameter by
    itself.
    """
    held = np.zeros((SEEDS, 4), dtype=bool)
    for i, one in enumerate(campaign.found):
        for k, name in enumerate(PARAMETER_ORDER):
            q = one.model.parameters[name]
            assert q is not None
            held[i, k] = q.interval_95[0] <= campaign.truth[k] <= q.interval_95[1]
    assert held.sum() >= binom.ppf(CHANCE, 4 * SEEDS, 0.95)
    assert np.all(held.sum(axis=0) >= binom.ppf(CHANCE, SEEDS, 0.95))


def test_estimates_are_unbiased_and_scatter_as_stated(campaign: Campaign) -> None:
    """Errors in stated uncertainties: mean zero within five of 1 / sqrt(40), variance one within five of sqrt(2 / 39)
    either way.

    Stated uncertainties come from some 40 or more degrees of freedom: their own scatter adds to the variance no more
    than 5 %.
    """
    stated = np.array([np.sqrt(np.diag(one.model.covariance)) for one in campaign.found])
    error = np.array([one.model.model.vector for one in campaign.found]) - campaign.truth
    normalised = error / stated
    assert np.all(np.abs(normalised.mean(axis=0)) < 5 / np.sqrt(SEEDS))
    assert np.all(np.abs(np.log(normalised.var(axis=0, ddof=1))) < 5 * np.sqrt(2 / (SEEDS - 1)) + 0.05)


def test_correlations_are_the_stated_ones(campaign: Campaign) -> None:
    """Whitened by the stated covariance the errors are independent: a correlation of 40 has s.d. 1 / sqrt(39); five
    of it.
    """
    whitened = []
    for one in campaign.found:
        scale = np.sqrt(np.diag(one.model.covariance))
        root = np.linalg.cholesky(one.model.covariance / np.outer(scale, scale))
        whitened.append(np.linalg.solve(root, (one.model.model.vector - campaign.truth) / scale))
    correlation = np.corrcoef(np.transpose(whitened))
    assert np.max(np.abs(correlation - np.eye(4))) < 5 / np.sqrt(SEEDS - 1)


def test_false_alarms_of_the_adequacy_test(campaign: Campaign) -> None:
    """A true second-order rig is called inadequate in 5 % of the runs, no more than chance at 1e-4; p-values are
    spread evenly.
    """
    p_values = np.array([one.model.adequacy.p_value for one in campaign.found])
    assert np.sum(p_values < 0.05) <= binom.ppf(1 - CHANCE, SEEDS, 0.05)
    assert kstest(p_values, "uniform").pvalue > CHANCE


def test_clock_map_holds_the_truth(campaign: Campaign) -> None:
    """Ratio of +150 ppm in its 95 % interval as often as chance allows; lost frames, interval and jitter as they
    were.
    """
    held = sum(
        one.model.clock.ratio_ppm.interval_95[0] <= 150.0 <= one.model.clock.ratio_ppm.interval_95[1]
        for one in campaign.found
    )
    assert held >= binom.ppf(CHANCE, SEEDS, 0.95)
    for one in campaign.found:
        clock = one.model.clock
        assert not clock.offset_known
        assert clock.jitter == pytest.approx(0.001, rel=5 / np.sqrt(2 * clock.frames))
        assert clock.frame_interval == pytest.approx(1 / 60, rel=1e-4)
    # about 1050 frames a run; the first and the last frame of a run, when lost, leave no gap
    lost = sum(one.model.clock.lost_frames for one in campaign.found)
    total = sum(one.model.clock.frames for one in campaign.found) + lost
    assert abs(lost - 0.02 * total) < 5 * np.sqrt(0.02 * total) + 2 * SEEDS * 0.02


def test_measured_response_scatters_as_stated(campaign: Campaign, vane_model: SecondOrder) -> None:
    """Error squared over stated variance is f / (f - 2) on average: 600 values, and one noise level a run known to 2
    / f.
    """
    ratio = []
    for one in campaign.found:
        f = one.response.frequency
        truth = vane_model.response(f) * np.exp(-2j * np.pi * f * 0.35)
        ratio.append(np.abs(one.response.response - truth) ** 2 / one.response.variance)
    freedom = float(one.response.degrees_of_freedom.min())
    # ratio and offset of the clocks are fitted: the phase at every line moves with the lag, which the variance of a
    # line alone
    # does not contain: two of thirty numbers a run, at most 2 / 30 of the mean in excess
    spread = 5 * np.sqrt(1 / np.size(ratio) + 2 / (SEEDS * freedom))
    assert np.mean(ratio) == pytest.approx(freedom / (freedom - 2), abs=spread + 2 / 30)


def test_two_clocks_are_told(campaign: Campaign) -> None:
    """The delay contains the offset, every time, and nothing else is wrong with a good record."""
    for one in campaign.found:
        codes = {c.code for c in one.model.caveats}
        assert "delay_includes_clock_offset" in codes
        assert codes <= {"delay_includes_clock_offset", "model_inadequate"}


# ---- limits ----


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
    found = identify(recorded(short_multisine, reversed_rig(vane_model), seed=1, **SENSOR))
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


# ---- several runs ----


def test_runs_combined_are_the_generalised_mean(campaign: Campaign) -> None:
    """Gain, natural frequency and damping ratio by the weights of their inverse covariances, written out; the delay
    is the last's.
    """
    some = campaign.found[:5]
    weights = [np.linalg.inv(one.model.covariance[:3, :3]) for one in some]
    covariance = np.linalg.inv(sum(weights))
    mean = covariance @ sum(w @ one.model.model.vector[:3] for w, one in zip(weights, some, strict=True))
    found = combine(some).model
    np.testing.assert_allclose(found.model.vector[:3], mean, rtol=1e-9)
    assert found.model.delay == some[-1].model.model.delay
    assert found.runs == tuple(f"seed {seed}" for seed in range(5))
    if "runs_differ" not in [c.code for c in found.caveats]:
        np.testing.assert_allclose(found.covariance[:3, :3], covariance, rtol=1e-9)


def test_runs_that_differ_widen_the_interval(campaign: Campaign) -> None:
    """A run moved by twenty uncertainties: the covariance grows by the Birge ratio, and the user is told."""
    first, second = campaign.found[:2]
    moved = second.model.model.vector.copy()
    moved[1] += 20 * np.sqrt(second.model.covariance[1, 1])
    other = replace(second, model=replace(second.model, model=SecondOrder.from_vector(moved)))
    together, apart = combine([first, second]).model, combine([first, other]).model
    assert "runs_differ" in [c.code for c in apart.caveats]
    assert apart.covariance[1, 1] > 20 * together.covariance[1, 1]


def test_runs_in_different_units_and_no_runs_are_refused(campaign: Campaign) -> None:
    """Degrees and radians have no mean; nothing has none either."""
    first, second = campaign.found[:2]
    with pytest.raises(EstimationError, match="different angle units: import them with the same rig sheet"):
        combine([first, replace(second, model=replace(second.model, angle_unit="rad"))])
    with pytest.raises(EstimationError, match="no complete run to combine"):
        combine([])
