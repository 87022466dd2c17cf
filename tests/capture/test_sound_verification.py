"""A finished run proves itself: every loss shows, however it happened, and nothing else does."""

from __future__ import annotations

import math

import numpy as np
import pytest

from freqid.capture.sound.loopback_match import match_loopback
from freqid.capture.sound.messages import Block
from freqid.capture.sound.playback import Playback as Player
from freqid.capture.sound.playback import PlaybackPlan, digital_samples
from freqid.capture.sound.verification import Verification, Verified

RATE = 8000.0
TIME = np.arange(round(20 * RATE)) / RATE
VOLTAGE = 4 * np.sin(np.pi * TIME / 20) * np.sin(2 * np.pi * (2 * TIME + 0.2 * TIME**2))
STEPS = np.where(TIME % 4 < 2, 0.0, 2.0) + 0.0
LOOPBACK_FULL_SCALE = 8.0


def plan_of(voltage: np.ndarray) -> PlaybackPlan:
    """The plan for a voltage at 8 kHz."""
    return PlaybackPlan(
        sample_rate=RATE, full_scale=10.0, bias=0.0, voltage_limit=5.0, slew_rate=math.inf,
        largest_step=float(np.max(np.abs(np.diff(voltage)))), n_samples=voltage.size,
    )  # fmt: skip


def stream(voltage: np.ndarray, *, delay: int = 800, gain: float = 1.0, noise: float = 1e-3) -> np.ndarray:
    """The frames (N, 3) of an undisturbed stream."""
    plan = plan_of(voltage)
    player = Player(digital_samples(voltage, full_scale=10.0, voltage_limit=5.0), plan)
    sent = player.next(plan.n_frames).astype(float)
    recorded = np.concatenate([np.zeros(delay), sent])[: sent.size] * 10 * gain
    recorded = recorded + noise * np.random.default_rng(3).standard_normal(sent.size)
    return np.stack([sent, recorded / LOOPBACK_FULL_SCALE, np.zeros(sent.size)], axis=1).astype(np.float32)


def verified(voltage: np.ndarray, frames: np.ndarray, *, flags: dict[int, int] | None = None) -> Verified:
    """What the verification says of the frames; `flags` by number of the block of 500 frames."""
    check = Verification(
        plan_of(voltage), loopback_full_scale=LOOPBACK_FULL_SCALE, largest_departure=float(np.max(np.abs(voltage)))
    )
    for number, first in enumerate(range(0, len(frames), 500)):
        flag = (flags or {}).get(number, 0)
        check.take(Block(first_frame=first, flags=flag, frames=frames[first : first + 500]))
    return check.result()


def delayed_from(frames: np.ndarray, second: float, by: int) -> np.ndarray:
    """Both inputs `by` frames later (earlier where negative) from a second of the profile on."""
    begin = round((1 + second) * RATE)
    changed = frames.copy()
    changed[begin:, 1:] = np.roll(frames[:, 1:], by, axis=0)[begin:]
    return changed


@pytest.mark.parametrize("voltage", [VOLTAGE, STEPS], ids=["sweep", "steps"])
@pytest.mark.parametrize("gain", [1.0, -0.7])
def test_undisturbed_run_is_verified(voltage: np.ndarray, gain: float) -> None:
    """Delay and gain are found, and no problem is."""
    found = verified(voltage, stream(voltage, gain=gain))
    assert found.problems == ()
    # noise 1 mV: the standard uncertainty of the gain is below 1e-3 / (1 V rms sqrt(48000)) = 5e-6, four of them, and
    # float32; that of the delay below 1e-3 / (rms slope sqrt(48000)): 0.004 frames for steps of 2 V (0.02 V rms slope)
    assert found.gain == pytest.approx(gain, abs=3e-5)
    assert found.delay == pytest.approx(800, abs=0.05)
    assert found.largest_shift is not None and found.largest_shift < 0.5


@pytest.mark.parametrize("by", [1, -1, 7, 64, 1024, 5000, -700])
@pytest.mark.parametrize("second", [3.0, 9.3, 15.0])
def test_every_step_of_the_delay_shows_in_a_sweep(by: int, second: float) -> None:
    """From a single frame on, early and late."""
    found = verified(VOLTAGE, delayed_from(stream(VOLTAGE), second, by))
    assert found.problems


@pytest.mark.parametrize("by", [1, 30, 1024, -700])
def test_every_step_of_the_delay_shows_in_a_step_test(by: int) -> None:
    """Most of a step test is at rest; its edges still tell of every frame."""
    assert verified(STEPS, delayed_from(stream(STEPS), 9.0, by)).problems


def test_flag_after_the_pre_roll_is_a_problem_and_before_is_none() -> None:
    """The first blocks of a stream may be lost; later ones may not."""
    frames = stream(VOLTAGE)
    assert verified(VOLTAGE, frames, flags={0: 2, 15: 2}).problems == ()
    found = verified(VOLTAGE, frames, flags={20: 2})
    assert found.flagged == 1 and found.problems == ("input overflow at 0.250 s",)


def test_missing_end_and_gap_are_problems() -> None:
    """Fewer frames than planned, and frames that do not follow each other."""
    frames = stream(VOLTAGE)
    assert "were to be sent" in verified(VOLTAGE, frames[:-600]).problems[-1]
    check = Verification(plan_of(VOLTAGE), loopback_full_scale=None, largest_departure=4.0)
    check.take(Block(first_frame=0, flags=0, frames=frames[:500]))
    check.take(Block(first_frame=600, flags=0, frames=frames[600:]))
    assert check.result().problems == ("100 frames are missing at -0.938 s",)


def test_clipped_input_is_a_problem() -> None:
    """Samples at full scale are counted from the profile on."""
    frames = stream(VOLTAGE)
    frames[:100, 2] = 1.0
    assert verified(VOLTAGE, frames).clipped == 0
    frames[9000:9003, 2] = -1.0
    assert verified(VOLTAGE, frames).problems == ("3 samples stand at the inputs' full scale",)


def test_absent_or_distorted_loopback_is_a_problem() -> None:
    """Noise in its place, or a voltage that is not the one sent (a high-pass of an AC-coupled interface at 1 Hz)."""
    frames = stream(VOLTAGE)
    noise = frames.copy()
    noise[:, 1] = 1e-3 * np.random.default_rng(4).standard_normal(len(frames))
    assert verified(VOLTAGE, noise).problems == ("the loopback does not show the voltage that was sent",)
    coupled = frames.copy()
    low, pole = 0.0, math.exp(-2 * math.pi * 1.0 / RATE)
    for n, value in enumerate(frames[:, 1]):
        low = pole * low + (1 - pole) * float(value)
        coupled[n, 1] = value - low
    assert any("DC-coupled" in problem for problem in verified(VOLTAGE, coupled).problems)


def test_without_loopback_counts_and_flags_remain() -> None:
    """Delay and gain are then None, not guessed."""
    check = Verification(plan_of(VOLTAGE), loopback_full_scale=None, largest_departure=4.0)
    check.take(Block(first_frame=0, flags=0, frames=stream(VOLTAGE)))
    found = check.result()
    assert (found.delay, found.gain, found.problems) == (None, None, ())


@pytest.mark.parametrize("delay", [0, 1, 799, 7000])
def test_match_finds_a_delay_of_part_of_a_frame(delay: int) -> None:
    """A shifted sweep computed in closed form, between the frames: whole and fraction are found together."""
    fraction = 0.3
    time = TIME - (delay + fraction) / RATE
    later = np.where(time < 0, 0, 4 * np.sin(np.pi * time / 20) * np.sin(2 * np.pi * (2 * time + 0.2 * time**2)))
    match = match_loopback(VOLTAGE, 0.9 * later + 0.05, most=8000)
    assert match is not None
    # first order in the shift: its square over two times the curvature, (2 pi 10 / 8000)^2 / 2 0.3^2 = 3e-6 of 4 V,
    # and central differences: (2 pi 10 / 8000)^2 / 6 of the fraction = 1e-5 of 0.3
    assert match.delay == pytest.approx(delay + fraction, abs=1e-3)
    assert match.gain == pytest.approx(0.9, abs=1e-4) and match.offset == pytest.approx(0.05, abs=1e-4)


def test_match_of_a_constant_is_none() -> None:
    """Where nothing moves nothing can be matched."""
    assert match_loopback(np.ones(5000), np.ones(5000), most=100) is None
