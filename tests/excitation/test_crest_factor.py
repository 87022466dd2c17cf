"""Do the phases give the crest factors that are published for them?"""

from __future__ import annotations

import numpy as np
import pytest

from excitation import ExcitationError, crest_factor_of, lower_peak, multisine_waveform, random_phases, schroeder_phases
from excitation.crest_factor import _log_norm

# phi_k = -pi k (k - 1) / F, M. R. Schroeder, IEEE Trans. IT 16 (1970) 85-89 (phases from memory); the crest factors
# are independent calculations on 128-fold oversampled waveforms, given to three decimals
SCHROEDER = {8: 1.786, 10: 1.916, 15: 1.788, 16: 1.826, 20: 1.765, 31: 1.782, 32: 1.735, 40: 1.712, 50: 1.721}
SCHROEDER |= {64: 1.707, 100: 1.676, 128: 1.704, 256: 1.680, 1000: 1.677}


def _crest(phases: np.ndarray, *, oversampling: int = 128) -> float:
    n_lines = phases.size
    lines = np.exp(1j * phases)
    return crest_factor_of(
        multisine_waveform(lines, harmonics=np.arange(1, n_lines + 1), n_samples=oversampling * n_lines)
    )


@pytest.mark.parametrize(("n_lines", "published"), SCHROEDER.items())
def test_schroeder_crest_factors(n_lines: int, published: float) -> None:
    """Flat consecutive lines with Schroeder's phases; half a unit of the last digit, and 3e-4 between the points."""
    # 128 points per period of the highest line miss at most 1 - cos(pi/128) = 3.0e-4 of the peak, 5e-4 in all
    assert _crest(schroeder_phases(np.ones(n_lines))) == pytest.approx(published, abs=1.0e-3)


def test_schroeder_phases_in_closed_form() -> None:
    """Equal amplitudes, of whatever size, give -pi k (k - 1) / F."""
    k = np.arange(1, 32)
    np.testing.assert_allclose(schroeder_phases(np.full(31, 0.3)), -np.pi * k * (k - 1) / 31, rtol=0, atol=1e-12)


def test_sine_and_zero_phases() -> None:
    """A sine has sqrt 2, F lines in phase have sqrt(2 F): both peaks lie on a point."""
    assert _crest(np.zeros(1)) == pytest.approx(np.sqrt(2), rel=1e-12)
    assert _crest(np.zeros(31)) == pytest.approx(np.sqrt(62), rel=1e-12)


def test_random_phases_have_the_known_median() -> None:
    """The median of 400 seeds for 31 lines is 2.84."""
    crests = [_crest(random_phases(31, rng=np.random.default_rng(seed)), oversampling=16) for seed in range(400)]
    # the 5 to 95 % range 2.40 to 3.67 means a density near 1 at the median: its standard error is
    # 1 / (2 sqrt(400)) = 0.025; 4 of these, and 0.01 for 16 points per period and the rounded value
    assert np.median(crests) == pytest.approx(2.84, abs=0.11)


@pytest.mark.parametrize("n_lines", [5, 31, 128])
def test_descent_beats_schroeder(n_lines: int) -> None:
    """From random phases the descent reaches a lower crest factor than Schroeder's, and not below the best known."""
    best_known = {5: 1.483, 31: 1.386, 128: 1.381}[n_lines]  # L_p descent to p = 1024, 128-fold oversampled
    start = random_phases(n_lines, rng=np.random.default_rng(1))
    lowered = lower_peak(start, harmonics=np.arange(1, n_lines + 1), signals=np.ones((1, n_lines), dtype=complex))
    crest = _crest(lowered)
    assert crest < min(_crest(start), 1.6)
    assert crest > best_known - 0.03


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_thorough_descent_of_31_equal_lines(seed: int) -> None:
    """Eight starts bring 31 equal lines to a crest factor of 1.42 or less, whatever the seed."""
    rng = np.random.default_rng(seed)
    signals, harmonics = np.ones((1, 31), dtype=complex), np.arange(1, 32)
    lowered = lower_peak(random_phases(31, rng=rng), harmonics=harmonics, signals=signals, n_starts=8, rng=rng)
    # 128 points per period of the highest line miss at most 3.0e-4 of the peak: 4.3e-4
    assert _crest(lowered) <= 1.42 - 4.3e-4


@pytest.mark.parametrize("n_starts", [0, 3])
def test_starts_that_cannot_be_made_are_refused(n_starts: int) -> None:
    """No start at all, or random ones without random numbers, are refused."""
    with pytest.raises(ExcitationError, match=f"n_starts: {n_starts}"):
        lower_peak(np.zeros(3), harmonics=np.arange(1, 4), signals=np.ones((1, 3), dtype=complex), n_starts=n_starts)


def test_descent_is_never_worse_than_its_start() -> None:
    """Phases that are already good, Schroeder's lowered once, come back no worse when lowered again."""
    signals, harmonics = np.ones((1, 20), dtype=complex), np.arange(1, 21)
    once = lower_peak(schroeder_phases(np.ones(20)), harmonics=harmonics, signals=signals)
    twice = lower_peak(once, harmonics=harmonics, signals=signals)
    # judged on 6 points per period or more; between these a peak can be 1 - cos(pi/12) = 3.4 % higher
    assert _crest(twice) <= _crest(once) * 1.035


def test_two_signals_are_lowered_together() -> None:
    """Where a second signal sets the peak, the descent lowers that one."""
    harmonics = np.arange(1, 31)
    resonant = 10 / (1 - (harmonics / 12.3) ** 2 + 0.05j * harmonics)
    signals = np.array([np.ones(30), resonant])
    start = random_phases(30, rng=np.random.default_rng(4))

    def peaks(phases: np.ndarray) -> list[float]:
        lines = signals * np.exp(1j * phases)
        return [
            float(np.max(np.abs(multisine_waveform(row, harmonics=harmonics, n_samples=2048)))) for row in lines
        ]

    voltage_alone = peaks(lower_peak(start, harmonics=harmonics, signals=signals[:1]))
    both = peaks(lower_peak(start, harmonics=harmonics, signals=signals))
    assert both[1] < 0.85 * voltage_alone[1]
    assert both[1] < 0.85 * peaks(start)[1]


def test_gradient_of_the_norm_against_differences() -> None:
    """The gradient agrees with central differences of 1e-5 rad: their error is of the order 1e-10 times p^2."""
    rng = np.random.default_rng(6)
    harmonics = np.array([1, 3, 4, 9])
    signals = rng.normal(size=(2, 4)) + 1j * rng.normal(size=(2, 4))
    phases = rng.uniform(0, 6, 4)
    gradient = _log_norm(phases, 8, harmonics, signals, 128)[1]
    for index in range(4):
        shift = 1e-5 * (np.arange(4) == index)
        high = _log_norm(phases + shift, 8, harmonics, signals, 128)[0]
        low = _log_norm(phases - shift, 8, harmonics, signals, 128)[0]
        assert gradient[index] == pytest.approx((high - low) / 2e-5, abs=1e-7)


@pytest.mark.parametrize("samples", [[], [0.0, 0.0]])
def test_nothing_has_no_crest_factor(samples: list[float]) -> None:
    """No samples, or none but zero, are refused."""
    with pytest.raises(ExcitationError, match="rms of 0"):
        crest_factor_of(samples)
