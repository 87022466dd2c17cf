"""Frames find their slot whatever happened to stamps and frames, and the transform on the grid is the plain one."""

from __future__ import annotations

import numpy as np
import pytest

from freqid.estimate.frame_grid import FrameGrid


def grid_of(kept: np.ndarray, *, jitter: float = 0.0, seed: int = 0) -> FrameGrid:
    """Frames `kept` of a sensor at 60 frames/s whose stamps jitter (rms, s)."""
    rng = np.random.default_rng(seed)
    return FrameGrid.from_stamps(5.0 + kept / 60 + jitter * rng.standard_normal(len(kept)))


@pytest.mark.parametrize("lost", [0.0, 0.02, 0.3])
def test_every_frame_finds_its_slot(lost: float) -> None:
    """With up to 30 % of the frames lost and 1 ms of jitter (6 % of an interval) the slots are those of the sensor."""
    rng = np.random.default_rng(4)
    kept = np.flatnonzero(rng.random(1200) >= lost)
    grid = grid_of(kept, jitter=0.001)
    np.testing.assert_array_equal(grid.slot, kept - kept[0])
    assert grid.lost == kept[-1] - kept[0] + 1 - len(kept)
    np.testing.assert_array_equal(grid.before_gaps, np.flatnonzero(np.diff(kept) > 1))
    # slope of a straight line through n frames over a span S: s.d. jitter sqrt(12 / n) / S intervals; five of them
    assert grid.interval == pytest.approx(1 / 60, abs=5 * 0.001 * np.sqrt(12 / len(kept)) / 1200)
    # rms of n normal deviates: relative s.d. sqrt(1 / 2 n); five of them
    assert grid.jitter == pytest.approx(0.001, rel=5 / np.sqrt(2 * len(kept)))


def test_one_long_gap_costs_no_slot() -> None:
    """A second without frames is sixty empty slots."""
    grid = grid_of(np.concatenate([np.arange(300), np.arange(360, 900)]), jitter=0.0005)
    assert grid.lost == 60
    np.testing.assert_array_equal(grid.before_gaps, [299])


def test_stamps_rounded_to_centiseconds_keep_their_order() -> None:
    """At 60 frames/s rounding moves a stamp by up to 0.3 of an interval: slots stay those of the sensor."""
    kept = np.arange(600)
    grid = FrameGrid.from_stamps(np.round(kept / 60, 2))
    np.testing.assert_array_equal(grid.slot, kept)


def test_a_repeated_stamp_takes_the_next_slot() -> None:
    """No two frames share a slot, and what follows stays in place."""
    stamps = np.arange(20) / 60
    stamps[7] = stamps[6]
    grid = FrameGrid.from_stamps(stamps)
    np.testing.assert_array_equal(grid.slot, np.arange(20))


def test_the_transform_is_unitary_and_inverts() -> None:
    """Parseval over the full circle, with lost frames and both parities of the size; rounding only."""
    rng = np.random.default_rng(5)
    for size in (120, 121):
        kept = np.sort(np.concatenate([[0, size - 1], rng.choice(np.arange(1, size - 1), 80, replace=False)]))
        grid, values = grid_of(kept), rng.normal(size=82)
        spectrum = grid.spectrum(values)
        assert np.sum(grid.multiplicity * np.abs(spectrum) ** 2) == pytest.approx(values @ values, rel=1e-12)
        np.testing.assert_allclose(grid.back(spectrum), values, atol=1e-12)
        columns = rng.normal(size=(82, 3))
        np.testing.assert_allclose(grid.spectrum(columns)[:, 1], grid.spectrum(columns[:, 1]), atol=1e-12)


def test_a_bin_is_the_plain_sum() -> None:
    """One bin by the definition of the discrete Fourier transform."""
    grid = grid_of(np.arange(50))
    values = np.random.default_rng(6).normal(size=50)
    expected = np.sum(values * np.exp(-2j * np.pi * grid.frequency[7] * np.arange(50) / 60)) / np.sqrt(50)
    assert grid.spectrum(values)[7] == pytest.approx(expected, abs=1e-10)


def test_empty_slots_are_filled_by_straight_lines() -> None:
    """A straight line stays one, gaps or not."""
    kept = np.array([0, 1, 2, 6, 7, 12])
    np.testing.assert_allclose(grid_of(kept).filled(3.0 * kept - 1), 3.0 * np.arange(13) - 1, atol=1e-12)
