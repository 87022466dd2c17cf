"""The noise level is unbiased, as uncertain as it says, and blind to the harmonics."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from scipy.signal import lfilter

from freqid.estimate.frame_grid import FrameGrid
from freqid.estimate.noise_spectrum import noise_spectrum
from freqid.estimate.periodic import LineRegression, steady_noise
from freqid.estimate.prediction import MotionParameters
from freqid.estimate.record import Record
from freqid.estimate.record_fit import refine
from freqid.records import InputStream, Run
from freqid.second_order import SecondOrder

SEEDS = 60


def constant(n: int) -> np.ndarray:
    """The one column that is always fitted: the rest angle. It takes the bin at 0 Hz alone, on a full grid."""
    return np.ones((n, 1))


@pytest.mark.parametrize("lost", [0.0, 0.3])
def test_white_noise_has_its_variance_everywhere(lost: float) -> None:
    """Over 60 seeds the mean level at each of 100 frequencies is the variance, and each level as uncertain as it says.

    A level of f degrees of freedom has the relative variance 2 / f. Five deviations of the mean are missed by one of
    100 with a chance of 6e-5. All levels together: some eight windows are independent.
    """
    rng, wanted = np.random.default_rng(1), np.linspace(0.5, 29.5, 100)
    levels, claimed = [], []
    for _ in range(SEEDS):
        kept = np.flatnonzero(rng.random(720) >= lost)
        grid = FrameGrid.from_stamps(kept / 60)
        level, freedom = noise_spectrum(0.3 * rng.standard_normal(len(kept)), grid, fitted=constant(len(kept))).at(
            wanted
        )
        levels.append(level / 0.09)
        claimed.append(2 / freedom)
    variance = np.mean(claimed, axis=0)
    assert np.max(np.abs(np.mean(levels, axis=0) - 1) / np.sqrt(variance / SEEDS)) < 5
    share = np.mean((np.array(levels) - 1) ** 2 / np.array(claimed))
    assert share == pytest.approx(1.0, rel=5 * np.sqrt(2 / (SEEDS - 1) / 8))


def test_fitted_parameters_are_paid_for() -> None:
    """Projected on 150 columns, a residual of 600 frames loses a quarter of its power: the level makes up for it, 40
    seeds.

    Mean of 40 means over 300 bins of two degrees of freedom, the ends weighing double at most: five times sqrt(2 /
    12000).
    """
    rng = np.random.default_rng(2)
    grid, columns = FrameGrid.from_stamps(np.arange(600) / 60), rng.standard_normal((600, 150))
    levels = []
    for _ in range(40):
        noise = rng.standard_normal(600)
        left = noise - columns @ np.linalg.lstsq(columns, noise, rcond=None)[0]
        levels.append(noise_spectrum(left, grid, fitted=columns).level.mean())
    assert np.mean(levels) == pytest.approx(1.0, abs=5 * np.sqrt(2 / 12_000))


def test_harmonics_are_left_out() -> None:
    """Lines a hundred times the noise at the harmonics leave the level as it was: they fall on whole bins and are not
    used.
    """
    grid = FrameGrid.from_stamps(np.arange(720) / 60)  # 12 s: three periods of 4 s
    time, lines = np.arange(720) / 60, np.arange(1, 40) / 4.0
    noise = 0.3 * np.random.default_rng(3).standard_normal(720)
    signal = 30 * np.sum(np.cos(2 * np.pi * np.outer(time, lines) + np.arange(39)), axis=1)
    harmonic = (1 / 12.0, lines)
    loud, quiet = (noise_spectrum(r, grid, fitted=constant(720), harmonic=harmonic) for r in (noise + signal, noise))
    np.testing.assert_allclose(loud.level, quiet.level, rtol=1e-9)
    assert noise_spectrum(noise + signal, grid, fitted=constant(720)).level.max() > 100 * quiet.level.max()


def test_coloured_noise_keeps_its_colour() -> None:
    """First-order noise with a pole at 0.9: over 60 seeds the level is its spectrum, not flattened by the wide windows.

    Five of the claimed deviations of the mean; leakage of the plain transform is of order 1 / (1200 (1 - 0.9)), 1 %.
    At 0.2 Hz a plain window of 60 bins (3 Hz) would average the spectrum to less than half.
    """
    rng = np.random.default_rng(4)
    grid, wanted = FrameGrid.from_stamps(np.arange(1200) / 60), np.array([0.2, 4.0, 8.0, 15.0, 25.0])
    levels = []
    for _ in range(SEEDS):
        coloured = lfilter([1.0], [1.0, -0.9], rng.standard_normal(1400))[200:]
        found = noise_spectrum(coloured, grid, fitted=constant(1200))
        levels.append(found.at(wanted)[0])
    freedom = found.degrees_of_freedom.min()
    spectrum = 1 / np.abs(1 - 0.9 * np.exp(-2j * np.pi * wanted / 60)) ** 2
    rel = 5 * np.sqrt(2 / freedom / SEEDS) + 0.01
    np.testing.assert_allclose(np.mean(levels, axis=0), spectrum, rtol=rel)


def test_frequencies_above_half_the_frame_rate_fold_back() -> None:
    """A line at 30 + d Hz is seen at 30 - d Hz, and so is its noise."""
    grid = FrameGrid.from_stamps(np.arange(600) / 60)
    found = noise_spectrum(np.random.default_rng(5).standard_normal(600), grid, fitted=constant(600))
    for d in (1.0, 7.0, 29.0):
        assert found.at(np.array([30 + d]))[0] == pytest.approx(found.at(np.array([30 - d]))[0], rel=1e-9)


def test_too_few_free_bins_are_refused() -> None:
    """Thirty frames have fifteen bins; a level needs twenty."""
    grid = FrameGrid.from_stamps(np.arange(30) / 60)
    with pytest.raises(ValueError, match="only 15 bins free of the excitation; 20 are needed"):
        noise_spectrum(np.random.default_rng(6).standard_normal(30), grid, fitted=constant(30))


# some 340 bins between the harmonics, 12 seeds: the mean of 4000 levels of two degrees of freedom has a relative s.d.
# of
# 1.6 %, the ends weigh up to double: five times 2.2 %
LEVEL_WITHIN = 5 * 0.022


def test_steady_noise_is_that_of_the_sensor(
    short_multisine: InputStream, vane_model: SecondOrder, recorded: Callable[..., Run]
) -> None:
    """Between the harmonics of the real excitation nothing but the sensor's noise is left, 12 seeds."""
    share = []
    for seed in range(12):
        record = Record.from_run(recorded(short_multisine, vane_model, noise=0.3, seed=seed))
        fit = refine(record, MotionParameters(model=vane_model))
        assert fit is not None
        noise = steady_noise(record, fit, LineRegression.of(record, fit))
        assert noise is not None
        share.append(noise.level.mean() / 0.09)
    assert np.mean(share) == pytest.approx(1.0, abs=LEVEL_WITHIN)


@pytest.mark.parametrize("lost", [0.0, 0.3])
def test_what_the_lines_take_from_the_bins_between_them_is_put_back(lost: float) -> None:
    """A hundred lines fitted to noise: 200 columns of 720 frames, or of 500 with 30 % lost, are no reason to think it
    quieter.

    With frames lost the lines take power from the bins between the harmonics too. The bound is that above, over 12
    seeds.
    """
    rng, lines = np.random.default_rng(8), np.arange(1, 101) / 4.0
    share = []
    for _ in range(12):
        kept = np.flatnonzero(rng.random(720) >= lost)
        basis = np.exp(2j * np.pi * np.outer(kept / 60, lines))
        basis = np.concatenate([basis.real, basis.imag], axis=1)
        noise = 0.3 * rng.standard_normal(len(kept))
        left = noise - basis @ np.linalg.lstsq(basis, noise, rcond=None)[0]
        harmonic = (1 / 12.0, np.arange(1, 121) / 4.0)
        found = noise_spectrum(left, FrameGrid.from_stamps(kept / 60), fitted=basis, harmonic=harmonic)
        share.append(found.level.mean() / 0.09)
    assert np.mean(share) == pytest.approx(1.0, abs=LEVEL_WITHIN)
