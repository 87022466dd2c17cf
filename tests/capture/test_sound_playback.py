"""What is sent: every sample of the profile once, in order, and from anywhere a smooth way to rest."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from freqid.capture.sound.playback import Playback as Player
from freqid.capture.sound.playback import PlaybackPlan, digital_samples

RATE = 8000.0
PLAN = PlaybackPlan(
    sample_rate=RATE,
    full_scale=10.0,
    bias=0.0,
    voltage_limit=5.0,
    slew_rate=500.0,
    largest_step=2 * math.pi * 20 * 4 / RATE,
    n_samples=8000,
)
VOLTAGE = 4 * np.sin(2 * np.pi * 20 * np.arange(8000) / RATE)
SAMPLES = digital_samples(VOLTAGE, full_scale=10.0, voltage_limit=5.0)


def played(player: Player, *, block: int = 333, at_most: int = 10**6) -> np.ndarray:
    """Everything that is sent, asked for in blocks."""
    sent = []
    while not player.finished and player.position < at_most:
        sent.append(player.next(block))
    return np.concatenate(sent).astype(np.float64)


def test_whole_profile_is_sent_between_pre_roll_and_tail() -> None:
    """One second of bias, the samples to the last bit, half a second of bias, then silence."""
    sent = played(Player(SAMPLES, PLAN))
    begin = PLAN.pre_roll_frames
    assert begin == 8000 and PLAN.n_frames == 8000 + 8000 + 4000
    assert np.array_equal(sent[begin : begin + 8000].astype(np.float32), SAMPLES)
    assert not sent[:begin].any() and not sent[begin + 8000 :].any()


@pytest.mark.parametrize("bias", [0.0, 2.0, -3.0])
def test_bias_is_reached_and_left_on_ramps(bias: float) -> None:
    """With a bias the voltage starts and ends at 0, rests at the bias around the profile, and never steps."""
    plan = replace(PLAN, bias=bias)
    samples = digital_samples(bias + VOLTAGE / 4, full_scale=10.0, voltage_limit=5.0)
    sent = 10 * played(Player(samples, plan))[: plan.n_frames]
    begin = plan.pre_roll_frames
    # float32 keeps 24 bits: half a unit in the last place of 5 V over 10 V is 3e-8 of full scale
    rounding = 10 * 2.0**-24
    assert abs(sent[begin - 1] - bias) <= rounding and abs(sent[begin + plan.n_samples] - bias) <= rounding
    # the first ramp begins one step after 0: half its second difference, pi^2 / 4 of the bias over its frames squared
    assert abs(sent[0]) <= math.pi**2 / 4 * abs(bias) / plan.ramp_frames(bias) ** 2 + rounding if bias else sent[0] == 0
    assert sent[-1] == 0
    assert np.max(np.abs(np.diff(sent))) <= plan.largest_step + 2 * rounding


@pytest.mark.parametrize("bias", [0.0, 2.0])
@pytest.mark.parametrize("seed", range(20))
def test_stop_from_anywhere_never_steps(seed: int, bias: float) -> None:
    """Stopped at any instant, no step is larger than the profile's own, and half a second of bias ends it."""
    rng = np.random.default_rng(seed)
    plan = replace(PLAN, bias=bias)
    samples = digital_samples(bias + VOLTAGE * (5 - abs(bias)) / 4 * 0.99, full_scale=10.0, voltage_limit=5.0)
    plan = replace(plan, largest_step=float(10 * np.max(np.abs(np.diff(samples.astype(float))))))
    player = Player(samples, plan)
    before = [player.next(64) for _ in range(rng.integers(1, plan.n_frames // 64))]
    player.stop()
    sent = 10 * np.concatenate([*before, played(player)])
    assert np.max(np.abs(np.diff(sent))) <= plan.largest_step + 2 * 10 * 2.0**-24
    assert np.max(np.abs(sent)) <= 5.0
    at_bias = np.abs(sent - bias) <= 10 * 2.0**-24
    assert np.count_nonzero(at_bias[64 * len(before) :]) >= 0.5 * RATE


def test_stop_ends_soon() -> None:
    """Without a bias the rest is the ramp and half a second: at most a second of frames for a 20 Hz profile."""
    player = Player(SAMPLES, PLAN)
    player.next(10000)
    player.stop()
    ramp = PLAN.ramp_frames(5.0)
    # a raised cosine over 4 V with the profile's step 2 pi 20 4 / RATE: pi / 2 / (2 pi 20) s = 12.5 ms, so 50 ms rule
    assert ramp == round(0.05 * RATE)
    assert played(player, block=1).size == 0.5 * RATE + PLAN.ramp_frames(4.0)


def test_ramp_keeps_the_slew_limit() -> None:
    """A slew limit slower than 50 ms stretches the ramp: pi / 2 times the change over the limit."""
    plan = replace(PLAN, slew_rate=10.0, largest_step=0.0)
    assert plan.ramp_frames(5.0) == math.ceil(math.pi / 2 * 5 / 10 * RATE)


@pytest.mark.parametrize("n_loops", [1, 2, 7])
def test_loops_repeat_the_steady_part(n_loops: int) -> None:
    """The samples before, so many times those of the loop, the samples after."""
    plan = replace(PLAN, loop_start=1000, loop_stop=3000, n_loops=n_loops)
    sent = played(Player(SAMPLES, plan), block=777)[plan.pre_roll_frames :][: plan.profile_frames].astype(np.float32)
    expected = np.concatenate([SAMPLES[:1000], np.tile(SAMPLES[1000:3000], n_loops), SAMPLES[3000:]])
    assert np.array_equal(sent, expected)


def test_no_rounding_passes_the_limit() -> None:
    """float32 may round up: the largest sample is the largest float32 that is not above the limit."""
    rng = np.random.default_rng(5)
    for limit, full_scale in rng.uniform(0.1, 10.0, (500, 2)):
        digital = digital_samples(np.array([limit, -limit]), full_scale=full_scale, voltage_limit=limit)
        assert np.max(np.abs(digital.astype(float))) * full_scale <= limit


def test_samples_that_cannot_be_read_end_in_a_ramp() -> None:
    """Where reading fails, a stop from there still comes down from the last sample sent."""

    class Broken(np.ndarray):
        def __getitem__(self, key: object) -> np.ndarray:
            raise OSError("medium removed")

    player = Player(SAMPLES.view(Broken), PLAN)
    player.next(PLAN.pre_roll_frames)
    with pytest.raises(OSError, match="medium removed"):
        player.next(64)
    player.stop()
    assert played(player).size >= 0.5 * RATE
