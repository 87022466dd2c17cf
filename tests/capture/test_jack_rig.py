"""Is the rig of the sound tests what it claims? Exact echo, a round trip of one period, a vane equal to theory."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from jack_rig import jack_rig
from numpy.typing import NDArray
from plant_client import PlantSettings, Vane

from freqid.held_response import Drive, HeldResponse

RATE = 48000
PLAY = """
import sys, numpy as np, sounddevice as sd
sent = np.load(sys.argv[1])
np.save(sys.argv[2], sd.playrec(sent, {rate}, channels=2, device="vane", blocking=True, dtype="float32"))
"""


def theory(settings: PlantSettings, drive: NDArray[np.float64]) -> NDArray[np.float64]:
    """Angle in digits at every sample, from the closed solution for straight lines."""
    lines = Drive.from_samples(drive, start=0.0, interval=1 / RATE, smooth=True)
    vane = HeldResponse(lines, settings.natural_frequency, settings.damping_ratio)
    late = np.arange(len(drive)) / RATE - settings.delay
    return settings.gain * settings.voltage_full_scale / settings.angle_full_scale * vane.at(late)


def test_vane_equals_theory_however_the_blocks_are_cut() -> None:
    """Blocks of uneven lengths; both recursions carry a relative rounding error of about 1e-16 / (wn dt)^2 = 6e-10
    a sample, added over the 5 s that the vane remembers no more than tenfold.
    """
    settings = PlantSettings()
    drive = 0.2 * np.sin(2 * np.pi * 2.5 * np.arange(3 * RATE) / RATE)
    vane = Vane(settings)
    cuts = np.cumsum(np.random.default_rng(1).integers(1, 3000, 60))
    angle = np.concatenate([vane.process(block)[1] for block in np.split(drive, cuts)])
    expected = theory(settings, drive)
    np.testing.assert_allclose(angle, expected, atol=1e-8 * np.abs(expected).max())


def test_noise_begins_anew_with_the_drive_however_the_blocks_are_cut() -> None:
    """Two runs after rests of different lengths: the same noise from the onset on, other noise in the second onset."""
    settings = PlantSettings(sample_rate=100, delay_frames=2, noise=0.3)
    still = PlantSettings(sample_rate=100, delay_frames=2)
    drive = np.sin(np.arange(1.0, 201.0))

    def noise(rest: int, block: int) -> NDArray[np.float64]:
        whole = np.concatenate((np.zeros(rest), drive, np.zeros(70), drive))
        noisy, quiet = Vane(settings), Vane(still)
        cuts = range(block, len(whole), block)
        return np.concatenate([noisy.process(part)[1] - quiet.process(part)[1] for part in np.split(whole, cuts)])

    short, long = noise(60, 7)[60:], noise(111, 16)[111:]
    np.testing.assert_array_equal(short, long)
    assert not np.any(short[:200] == short[270:])


def test_loopback_may_die_after_a_while() -> None:
    """Silent from the sample on at which the drive has been non-zero for the set time."""
    vane = Vane(PlantSettings(sample_rate=100, loopback_ends=0.5, delay_frames=2))
    loopback = np.concatenate([vane.process(np.full(10, 0.3))[0] for _ in range(8)])
    assert np.all(loopback[:50] == 0.3)
    assert not loopback[50:].any()


@pytest.mark.usefixtures("jack_server_programs")
def test_device_echoes_exactly_one_period_later_and_the_recorder_hears_it(tmp_path: Path) -> None:
    """Random samples come back bit for bit, the angle equals theory to the half digit of float32 (0.3 * 2^-24)."""
    sent = np.zeros((RATE, 2), dtype=np.float32)
    sent[1:, 0] = np.random.default_rng(2).uniform(-0.3, 0.3, RATE - 1)
    np.save(tmp_path / "sent.npy", sent)
    with jack_rig(PlantSettings(sample_rate=RATE)) as rig:
        files = [str(tmp_path / name) for name in ("sent.npy", "heard.npy")]
        subprocess.run([sys.executable, "-c", PLAY.format(rate=RATE), *files], env=rig.environment, check=True)
        recorded = rig.sent()
    heard = np.load(files[1])
    np.testing.assert_array_equal(heard[rig.period :, 0], sent[: -rig.period, 0])
    expected = theory(rig.plant, sent[: -rig.period, 0].astype(float))
    np.testing.assert_allclose(heard[rig.period :, 1], expected, atol=0.3 * 2**-24 + 1e-8)
    begin = int(np.flatnonzero(recorded)[0]) - int(np.flatnonzero(sent[:, 0])[0])
    np.testing.assert_array_equal(recorded[begin : begin + RATE], sent[:, 0])
