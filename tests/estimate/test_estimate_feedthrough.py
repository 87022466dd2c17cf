"""An extra pole leaves the voltage in the misfit: with the right size and sign, and not where there is no pole."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from scipy.signal import lfilter

from freqid.estimate.adequacy import direction_told, with_direction
from freqid.estimate.feedthrough import Feedthrough, fit_feedthrough
from freqid.estimate.identification import identify
from freqid.estimate.model import Adequacy
from freqid.estimate.motion import estimate_motion
from freqid.estimate.record import Record
from freqid.held_response import Drive, HeldResponse
from freqid.records import InputStream, Run
from freqid.second_order import SecondOrder

Recorder = Callable[..., Run]
CORNER = 24.0  # Hz, eight times the natural frequency
FINER = 8


def behind_pole(run: Run, model: SecondOrder, noise: float) -> Run:
    """The run with an extra pole between voltage and rig, and its noise."""
    step = float(run.input.time[1] - run.input.time[0]) / FINER
    kept = np.exp(-2 * np.pi * CORNER * step)
    voltage = lfilter([0, 1 - kept], [1, -kept], np.repeat(run.input.voltage, FINER))
    drive = Drive.from_samples(voltage, start=float(run.input.time[0]), interval=step, smooth=True)
    response = HeldResponse(drive, model.natural_frequency, model.damping_ratio)
    angle = model.gain * response.mean_and_rate(run.angle.time - model.delay, run.angle.exposure)[0]
    angle = angle + noise * np.random.default_rng(1).standard_normal(len(angle))
    return replace(run, angle=replace(run.angle, angle=angle))


def feedthrough_of(run: Run) -> Feedthrough:
    """The test of one run."""
    motion = estimate_motion(Record.from_run(run))
    return fit_feedthrough(motion.record, motion.weighted)


@pytest.mark.parametrize("kind", ["short_multisine", "short_sweep", "short_steps"])
@pytest.mark.parametrize("gain", [12.0, -12.0])
def test_an_extra_pole_is_measured_whatever_the_excitation(
    kind: str, gain: float, request: pytest.FixtureRequest, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """With 0.01 deg of noise the corner is found where it is: the next term of the expansion, s^3 T^3 / 3, is
    wn T * 2 / 3 = 8 % of the first at the natural frequency and 2.7 times that at the end of the band, where the
    misfit is told; a quarter is allowed.
    """
    model = replace(vane_model, gain=gain)
    run = behind_pole(recorded(request.getfixturevalue(kind), model), model, 0.01)
    found = feedthrough_of(run)
    assert found.deviation > 5
    assert found.structure == "extra pole"
    assert found.corner == pytest.approx(CORNER, rel=0.25)


def test_an_extra_pole_is_told_and_widens_the_intervals(
    short_sweep: InputStream, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """The caveat names the pole; the interval of the delay holds the change that allowing for it would bring."""
    run = behind_pole(recorded(short_sweep, vane_model), vane_model, 0.05)
    found = identify(run).model
    assert found.adequacy.better_structure == "extra pole"
    assert not found.adequacy.adequate
    assert [c.message for c in found.caveats if c.code == "model_inadequate" and "extra pole" in c.message]
    assert np.sqrt(found.covariance[3, 3]) >= abs(feedthrough_of(run).shift[3])


@pytest.mark.parametrize("kind", ["short_multisine", "short_sweep", "short_steps"])
def test_without_a_pole_the_deviation_is_that_of_chance(
    kind: str, request: pytest.FixtureRequest, vane_model: SecondOrder, recorded: Recorder
) -> None:
    """Over 16 seeds the deviation has mean 0 (5 / sqrt(16)) and mean square 1 (5 sqrt(2 / 16), and from below as
    far in the logarithm).
    """
    drive = request.getfixturevalue(kind)
    deviations = np.array(
        [feedthrough_of(recorded(drive, vane_model, noise=0.3, exposure=0.008, seed=s)).deviation for s in range(16)]
    )
    bound = 5 * np.sqrt(2 / 16)
    assert abs(np.mean(deviations)) < 5 / np.sqrt(16)
    assert 1 / (1 + bound) < np.mean(deviations**2) < 1 + bound


def seen(deviation: float) -> Feedthrough:
    """A deviation with known noise."""
    return Feedthrough(deviation=deviation, degrees_of_freedom=1e9, corner=24.0, shift=np.zeros(4))


@pytest.mark.parametrize(
    ("lack", "deviation", "expected"),
    [
        # one-sided tail of the normal law: 1.96 -> 0.025, 2.5758 -> 0.005
        (0.9, 1.959964, 0.025 / 0.5),
        (0.9, -2.575829, 0.005 / 0.1),
        (0.01, 0.0, 0.01 / 0.4),
        (0.9, 0.0, 1.0),
    ],
)
def test_the_three_tests_share_the_false_alarms(lack: float, deviation: float, expected: float) -> None:
    """Each p-value is divided by its share, the smallest counts, and none exceeds 1."""
    whole = with_direction(Adequacy(statistic=1.0, degrees_of_freedom=10, p_value=lack), seen(deviation))
    assert whole.p_value == pytest.approx(expected, rel=1e-5)


def test_shares_make_five_percent() -> None:
    """20000 draws of independent tests: 1 - (1 - 0.03)(1 - 0.02) = 4.9 % below 0.05, five binomial deviations."""
    rng = np.random.default_rng(2)
    lacks, deviations = rng.random(20_000), rng.standard_normal(20_000)
    from scipy.stats import norm

    below = np.minimum(np.minimum(lacks / 0.4, norm.sf(deviations) / 0.5), norm.cdf(deviations) / 0.1) < 0.05
    ours = [
        with_direction(Adequacy(statistic=1.0, degrees_of_freedom=9, p_value=p), seen(d)).p_value < 0.05
        for p, d in zip(lacks[:400], deviations[:400], strict=True)
    ]
    assert ours == list(below[:400])
    expected = 1 - 0.97 * 0.98
    assert np.mean(below) == pytest.approx(expected, abs=5 * np.sqrt(expected / 20_000))


def test_nothing_is_told_where_lack_of_fit_cannot_be_tested() -> None:
    """Too few points for the lack of fit: no verdict at all."""
    lack = Adequacy(statistic=float("nan"), degrees_of_freedom=0, p_value=float("nan"))
    assert np.isnan(with_direction(lack, seen(9.0)).p_value)
    assert direction_told(seen(9.0)) and not direction_told(seen(0.0))
