"""Coarsely rounded stamps become evenly spaced ones; all others stay as they are."""

from __future__ import annotations

import numpy as np
import pytest

from freqid.estimate.rounded_stamps import evened, rounding_step

EVEN = 0.3 + np.arange(600) / 60


@pytest.mark.parametrize("step", [0.02, 0.01, 0.005])
def test_coarse_stamps_are_evened(step: float) -> None:
    """Frames with 1 ms of jitter: the even stamps are nearer the true instants than the rounded ones."""
    true = EVEN + 0.001 * np.random.default_rng(1).standard_normal(600)
    stamp = np.round(true / step) * step
    found, told = evened(stamp)
    assert told == pytest.approx(step)
    np.testing.assert_allclose(np.diff(found), np.diff(found)[0], rtol=1e-9)
    assert np.std(found - true) < np.std(stamp - true)


def test_gaps_stay_gaps() -> None:
    """Frames lost between coarse stamps leave their slots empty."""
    kept = np.delete(np.arange(600), [50, 51, 300])
    found, _ = evened(np.round(EVEN[kept] / 0.01) * 0.01)
    np.testing.assert_allclose(np.diff(found) * 60, np.diff(kept), rtol=1e-3)


def test_jitter_that_the_stamps_tell_is_kept() -> None:
    """Rounded to 1 ms with 1 ms of jitter the stamps tell more than the count; unrounded ones always do."""
    true = EVEN + 0.001 * np.random.default_rng(2).standard_normal(600)
    for stamp in (np.round(true, 3), true, EVEN):
        found, told = evened(stamp)
        assert told == 0.0
        assert found is stamp


def test_the_step_is_the_largest_that_divides_all() -> None:
    """Multiples of 4 ms, shifted by anything; no step below 0.1 ms."""
    assert rounding_step(0.123456789 + np.array([0.0, 0.012, 0.02, 0.02, 0.036])) == pytest.approx(0.004)
    assert rounding_step(np.array([0.0, 0.01234, 0.02111])) == 0.0
