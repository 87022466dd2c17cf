"""Mis-tracked frames and frames lost without a gap: found where they are, and nothing found where there is nothing."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.signal import lfilter

from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor
from freqid.estimate.identification import identify
from freqid.records import InputStream, Run
from freqid.second_order import SecondOrder

OFFSET = -0.2


@pytest.fixture
def clean(short_multisine: InputStream, vane_model: SecondOrder) -> Run:
    """A camera log on its own clock: 60 frames/s, noise 0.1 deg, 1 ms jitter, no frame lost."""
    sensor = SimulatedSensor(
        sample_rate=60.0, exposure=0.008, noise=0.1, jitter=0.001, clock_ratio=1.0002, clock_offset=OFFSET
    )
    rig = SimulatedRig(model=vane_model, sensor=sensor)
    return rig.run(short_multisine, kind="response", name="camera", rng=np.random.default_rng(5))


def close_up(run: Run, frames: list[int]) -> Run:
    """Lose these frames and close up the stamps of all later ones."""
    time = run.angle.time.copy()
    for k in frames:
        time[k + 1 :] -= 1 / 60
    kept = np.ones(len(time), dtype=bool)
    kept[frames] = False
    return replace(run, angle=replace(run.angle, time=time[kept], angle=run.angle.angle[kept]))


def test_frames_lost_without_a_gap_are_found(clean: Run, vane_model: SecondOrder) -> None:
    """Two losses, 5 s apart, are found to within 0.2 s; the parameters are as good as without them."""
    at = [400, 700]
    found = identify(close_up(clean, at)).model
    true = clean.angle.time[at]
    assert len(found.clock.silently_lost_at) == 2
    assert np.all(np.abs(found.clock.silently_lost_at - true) < 0.2)
    assert "frames_silently_lost" in [c.code for c in found.caveats]
    deviation = np.sqrt(np.diag(found.covariance))[:3]
    assert np.all(np.abs(found.model.vector - vane_model.vector)[:3] < 5 * deviation)


def test_a_loss_at_rest_is_placed_no_better_than_the_motion_tells(
    short_steps: InputStream, vane_model: SecondOrder
) -> None:
    """While the angle stands still between two steps nothing tells when a frame was lost: the interval spans the rest.

    At the lost frame the swing has decayed to less than a third of the noise. The loss lies in its interval, which is
    longer than half a second, and the parameters are as good as ever.
    """
    sensor = SimulatedSensor(sample_rate=60.0, exposure=0.008, noise=0.3, jitter=0.001, common_clock=True)
    rig = SimulatedRig(model=vane_model, sensor=sensor)
    run = rig.run(short_steps, kind="response", name="camera", rng=np.random.default_rng(7))
    changes = short_steps.time[1:][np.diff(short_steps.voltage) != 0]
    longest = int(np.argmax(np.diff(changes)))
    quiet = changes[longest] + 0.85 * (changes[longest + 1] - changes[longest])
    at = int(np.argmin(np.abs(run.angle.time - quiet)))
    found = identify(close_up(run, [at])).model
    assert len(found.clock.silently_lost_at) == 1
    low, high = found.clock.silently_lost_between[0]
    assert low <= run.angle.time[at] <= high
    assert high - low > 0.5
    deviation = np.sqrt(np.diag(found.covariance))
    assert np.all(np.abs(found.model.vector - vane_model.vector) < 5 * deviation)


def test_nothing_is_found_where_nothing_is_lost(clean: Run) -> None:
    """Neither losses nor outliers in a clean record."""
    clock = identify(clean).model.clock
    assert len(clock.silently_lost_at) == 0 and len(clock.outlier_at) == 0


def test_mis_tracked_frames_are_left_out(clean: Run, vane_model: SecondOrder) -> None:
    """Eleven frames off by 20 deg, two of them neighbours: exactly these are left out, told, and do no harm."""
    wrong = np.array([60, 61, 150, 222, 301, 395, 480, 555, 640, 733, 800])
    angle = clean.angle.angle.copy()
    angle[wrong] += np.where(np.arange(len(wrong)) % 2, 20.0, -20.0)
    found = identify(replace(clean, angle=replace(clean.angle, angle=angle))).model
    # stamps are those of the end of the exposure, which is where the sensor stamps
    np.testing.assert_allclose(found.clock.outlier_at, clean.angle.time[wrong])
    assert "outliers_left_out" in [c.code for c in found.caveats]
    deviation = np.sqrt(np.diag(found.covariance))[:3]
    assert np.all(np.abs(found.model.vector - vane_model.vector)[:3] < 5 * deviation)


def test_a_lost_frame_on_one_converter_is_not_looked_for(clean: Run) -> None:
    """Voltage and angle in the same rows cannot part company."""
    together = replace(
        clean,
        common_clock=True,
        input=replace(
            clean.input,
            time=clean.angle.time,
            voltage=np.interp(clean.angle.time * 1.0002 + OFFSET, clean.input.time, clean.input.voltage),
            hold="smooth",
            commanded=False,
            periodicity=None,
        ),
    )
    assert len(identify(close_up(together, [])).model.clock.silently_lost_at) == 0


def test_slow_noise_is_not_taken_for_lost_frames(clean: Run) -> None:
    """Noise of first order below 1 Hz, 0.5 deg, wanders like a wandering clock; no frame is claimed lost in five
    records.
    """
    pole = np.exp(-2 * np.pi / 60)
    for seed in range(5):
        white = np.random.default_rng(seed).standard_normal(len(clean.angle.time) + 300)
        slow = 0.5 * lfilter([np.sqrt(1 - pole**2)], [1, -pole], white)[300:]
        noisy = replace(clean, angle=replace(clean.angle, angle=clean.angle.angle + slow))
        assert len(identify(noisy).model.clock.silently_lost_at) == 0
