"""Live guards: trips when and only when the rig or the loopback is not as it must be."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from freqid.capture.sound.guard import AngleGuard, GuardLimits, LoopbackGuard

RATE = 4000.0
LIMITS = GuardLimits(
    sample_rate=RATE,
    pre_roll_frames=4000,
    angle=27.0,
    angle_unit="deg",
    angle_full_scale=45.0,
    voltage=5.0,
    loopback_full_scale=8.0,
    output_full_scale=10.0,
    largest_departure=4.0,
    thinning=4,
)
TIME = np.arange(round(12 * RATE)) / RATE
SENT = 4 * np.clip(TIME / 2, 0, 1) * np.sin(2 * np.pi * 2 * TIME) * np.cos(2 * np.pi * 0.31 * TIME)


def looked(guard: AngleGuard, angle: np.ndarray, *, block: int = 100) -> tuple[str | None, int]:
    """The reason and the frame at which the guard tripped; `angle` in deg from the first frame of the stream."""
    for first in range(0, angle.size, block):
        digital = (angle[first : first + block] / 45.0).astype(np.float32)
        if (reason := guard.look(first, digital)) is not None:
            return reason, first
    return None, angle.size


def followed(sent: np.ndarray, recorded: np.ndarray, *, block: int = 500) -> tuple[str | None, float]:
    """The reason and the time in s at which the loopback guard tripped; voltages in V from the profile's start."""
    guard = LoopbackGuard(LIMITS)
    for first in range(0, sent.size, block):
        part = slice(first, first + block)
        reason = guard.look((sent[part] / 10).astype(np.float32), (recorded[part] / 8).astype(np.float32))
        if reason is not None:
            return reason, (first + block) / RATE
    return None, sent.size / RATE


def late(values: np.ndarray, frames: int) -> np.ndarray:
    """The values so many frames later, the first one before them."""
    return np.concatenate([np.full(frames, values[0]), values])[: values.size]


def test_angle_within_the_share_passes() -> None:
    """26.9 of 27 deg about a rest of 3 deg never trips; the rest is learned from the pre-roll."""
    angle = np.concatenate([np.full(4000, 3.0), 3.0 + 26.9 * np.sin(2 * np.pi * 3 * TIME)])
    guard = AngleGuard(LIMITS)
    assert looked(guard, angle)[0] is None
    # float32 digits of up to 30 deg: 2^-24 of 45 deg each, and the mean over 2000 of them
    assert guard.rest == pytest.approx(3.0, abs=45 * 2.0**-23)
    assert guard.largest == pytest.approx(26.9, abs=45 * 2.0**-22)


@pytest.mark.parametrize("sign", [1, -1])
def test_angle_beyond_the_share_trips_in_the_same_block(sign: int) -> None:
    """Crossing 27 deg from rest trips in the block in which it stays beyond for half a millisecond."""
    angle = np.concatenate([np.full(4000, 3.0), 3.0 + sign * 10 * TIME])
    reason, at = looked(AngleGuard(LIMITS), angle)
    crossing = 4000 + 2.7 * RATE
    assert reason is not None and reason.startswith("guard: angle 27")
    assert at <= crossing < at + 200


def test_a_spike_does_not_trip() -> None:
    """One sample beyond is less than half a millisecond at 4 kHz (two samples): no reason to stop."""
    angle = np.concatenate([np.zeros(4000), 5 * np.sin(2 * np.pi * 3 * TIME)])
    angle[6000] = 40.0
    assert looked(AngleGuard(LIMITS), angle)[0] is None


def test_clipped_sensor_trips() -> None:
    """A sensor at its own full scale cannot show the stops any more, also before the profile begins."""
    limits = replace(LIMITS, angle=60.0)
    angle = np.minimum(np.concatenate([np.zeros(4000), 20 * TIME]), 45.0)
    reason, _ = looked(AngleGuard(limits), angle)
    assert reason is not None and "angle sensor at its full scale (45 deg)" in reason
    reason, at = looked(AngleGuard(limits), np.full(4000, -45.0))
    assert reason is not None and at == 0


def test_angle_that_is_no_number_trips() -> None:
    """NaN from a driver is a fault, not an angle."""
    assert "not a number" in str(looked(AngleGuard(LIMITS), np.full(500, np.nan))[0])


@pytest.mark.parametrize("delay", [0, 1, 86, 1500])
@pytest.mark.parametrize("gain", [1.0, 0.5, -1.0])
def test_loopback_that_follows_passes(delay: int, gain: float) -> None:
    """Any constant delay up to half a second, any gain (a crossed cable too), an offset and noise are in order."""
    rng = np.random.default_rng(delay)
    recorded = gain * late(SENT, delay) + 0.02 + 0.01 * rng.standard_normal(SENT.size)
    assert followed(SENT, recorded)[0] is None


def test_straight_voltage_does_not_mislead() -> None:
    """A slow ramp, in which a shift looks like an offset, fixes no delay: what follows it passes."""
    sent = np.concatenate([np.linspace(0, 3, round(6 * RATE)), 3 + SENT / 4])
    for delay in (0, 9, 120, 700, 1900):
        assert followed(sent, late(sent, delay))[0] is None


@pytest.mark.parametrize("lost", [800, -800])
def test_lost_frames_trip(lost: int) -> None:
    """A fifth of a second more or less on the way, from 6 s on, departs from what is expected within two seconds."""
    recorded = late(SENT, 1000)
    recorded[round(6 * RATE) :] = late(SENT, 1000 + lost)[round(6 * RATE) :]
    reason, at = followed(SENT, recorded)
    assert reason is not None and "guard: loopback departs" in reason
    assert 6 <= at <= 8


def test_cable_coming_off_trips() -> None:
    """A loopback that falls to zero at 6 s is noticed within a second of moving voltage."""
    recorded = late(SENT, 100)
    recorded[round(6 * RATE) :] = 0
    reason, at = followed(SENT, recorded)
    assert reason is not None and "a cable is off" in reason and 6 <= at <= 7.5


def test_absent_loopback_trips() -> None:
    """Noise alone is told apart from a loopback after some seconds of moving voltage."""
    rng = np.random.default_rng(1)
    reason, at = followed(SENT, 0.01 * rng.standard_normal(SENT.size))
    assert reason is not None and "does not show the voltage" in reason and at < 8


def test_voltage_beyond_the_limit_trips_at_once() -> None:
    """5 % above the voltage limit at the real output, in the very block."""
    recorded = SENT.copy()
    recorded[10000:10010] = 5.3
    reason, at = followed(SENT, recorded)
    assert reason is not None and "loopback 5.3 V, [limits] voltage is 5 V" in reason
    assert at == 10500 / RATE
