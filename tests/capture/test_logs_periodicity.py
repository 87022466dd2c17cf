"""Periodicity of a measured voltage: found where it is certain, never claimed where it is not."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from freqid.capture.logs import find_periodicity, open_log

Floats = NDArray[np.float64]
RATE = 1000.0  # Hz
PERIOD = 1000  # samples


def _multisine(bins: Floats, rng: np.random.Generator) -> Floats:
    phase = rng.uniform(0, 2 * np.pi, bins.size)
    return np.cos(2 * np.pi * np.outer(np.arange(PERIOD), bins) / PERIOD + phase).sum(axis=1)


def _found(voltage: Floats) -> tuple[float, int] | None:
    periodicity = find_periodicity(np.arange(voltage.size) / RATE, voltage)
    return None if periodicity is None else (periodicity.period, periodicity.n_periods)


@pytest.mark.parametrize("seed", range(5))
def test_repeated_multisine_between_rests(seed: int) -> None:
    """Four periods between rests and ramps, with noise of 0.3 %, are found with their lines and their place."""
    rng = np.random.default_rng(seed)
    bins = np.arange(1, 40)
    steady = np.tile(_multisine(bins, rng), 4)
    ramp = steady[:250] * np.linspace(0, 1, 250)
    voltage = np.concatenate([np.zeros(500), ramp, np.roll(steady, -250), np.zeros(800)])
    voltage += 0.003 * steady.std() * rng.standard_normal(voltage.size)
    found = find_periodicity(np.arange(voltage.size) / RATE, voltage)
    assert found is not None and found.n_periods in (3, 4)
    assert found.period == pytest.approx(PERIOD / RATE, rel=1e-12)  # a whole number of exact steps
    np.testing.assert_allclose(found.lines, bins, rtol=1e-12)
    assert found.start >= 0.75 - 0.25 and found.stop <= 4.75 + 0.25  # within a quarter period of the steady part


def test_one_period_of_odd_lines() -> None:
    """One period of odd lines is recognised by its empty even bins; one of all lines looks like a transient."""
    rng = np.random.default_rng(1)
    assert _found(_multisine(np.arange(1, 200, 2), rng)) == (1.0, 1)
    assert _found(_multisine(np.arange(1, 200), rng)) is None


def test_no_false_claims() -> None:
    """Noise, swept sines, a step, a random staircase and a period cut short are not called periodic."""
    rng = np.random.default_rng(2)
    time = np.arange(20000) / RATE
    assert _found(rng.standard_normal(8192)) is None
    assert _found(np.cumsum(rng.standard_normal(8192))) is None
    assert _found(np.sin(2 * np.pi * (1.3 * time - 0.5 * 0.05 * time**2))) is None
    assert _found(np.sin(2 * np.pi * (1.3 * time + 0.5 * 0.5 * time**2)) * np.hanning(time.size)) is None
    assert _found(np.where(time < 10, 0.0, 1.0)) is None
    assert _found(np.repeat(rng.choice([-1.0, 1.0], 400), 20)) is None
    assert _found(_multisine(np.arange(1, 200, 2), rng)[:-1]) is None
    assert _found(np.full(100, 2.0)) is None


def test_random_staircases_are_never_called_periodic() -> None:
    """A staircase that random choices drive is never called periodic over 200 seeds (a claim would be false)."""
    claims = [
        seed
        for seed in range(200)
        if _found(np.repeat(np.random.default_rng(seed).choice([-1.0, 0.0, 1.0], 60), 10)) is not None
    ]
    assert claims == []


def test_uneven_stamps_are_not_judged() -> None:
    """A periodic voltage with a gap in its stamps is not called periodic."""
    voltage = np.tile(_multisine(np.arange(1, 40), np.random.default_rng(3)), 4)
    time = np.arange(voltage.size) / RATE
    assert find_periodicity(time, voltage) is not None
    time[1500:] += 0.1
    assert find_periodicity(time, voltage) is None


def test_silverbox_period(open_data: Path) -> None:
    """Every realisation of the odd multisine is found with its published lines, odd bins 1 to 2683 of 8192."""
    voltage = open_log(open_data / "silverbox" / "growing_noise.csv").columns[0].numbers
    rate = 1e7 / 2**14
    time = np.arange(8192) / rate
    for start in (40586, 49278, 57972, 66663, 75354, 84046, 92739, 101430, 110123, 118814):
        found = find_periodicity(time, voltage[start + 380 : start + 380 + 8192])
        assert found is not None and found.n_periods == 1
        np.testing.assert_allclose(found.lines * 8192 / rate, np.arange(1, 2684, 2), rtol=1e-9)
        assert find_periodicity(time, voltage[start - 400 : start - 400 + 8192]) is None  # begins too early
    assert find_periodicity(np.arange(voltage.size) / rate, voltage) is None


@pytest.mark.parametrize(
    ("name", "column"),
    [
        ("torsion_oscillator/run_b.csv", 2),
        ("torsion_oscillator/run_d.csv", 2),
        ("dc_motor/binary_sequence.csv", 1),
        ("dc_motor/step.csv", 1),
    ],
)
def test_other_open_data_is_not_periodic(open_data: Path, name: str, column: int) -> None:
    """Slow sweeps, a random binary sequence and a step are not called periodic."""
    table = open_log(open_data / name)
    time, voltage = table.columns[0].numbers, table.columns[column].numbers
    known = np.isfinite(voltage)
    assert find_periodicity(time[known], voltage[known]) is None
