"""Read-offs against the textbook's closed forms, the smoothed curve against its formulas, pooling against JCGM 100."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binom

from freqid.quantity import Quantity, coverage_factor
from freqid.step_relations import (
    normalised_crossing_time,
    normalised_peak_time,
    normalised_settling_time,
    percent_overshoot,
)
from freqid.step_test.pooling import pool
from freqid.step_test.reading import StepFrames, read_step
from freqid.step_test.smooth_curve import SmoothCurve

FREQUENCY = 3.0
OMEGA = 2 * math.pi * FREQUENCY


def step_curve(time: np.ndarray, damping: float) -> np.ndarray:
    """Unit step response of an underdamped rig, closed form."""
    root = math.sqrt(1 - damping**2)
    wave = np.cos(root * OMEGA * time) + damping / root * np.sin(root * OMEGA * time)
    return np.asarray(1 - np.exp(-damping * OMEGA * time) * wave)


def frames(
    damping: float,
    *,
    rate: float = 1000.0,
    length: float = 4.0,
    noise: float = 1e-6,
    change: float = 10.0,
    seed: int = 0,
) -> StepFrames:
    """A step of 2 V that moves the angle by `change` from 5 deg; the settled levels are known as well as the noise
    allows.
    """
    time = np.arange(1, int(length * rate)) / rate
    rng = np.random.default_rng(seed)
    angle = 5.0 + change * step_curve(time, damping) + noise * rng.standard_normal(len(time))
    level = noise / math.sqrt(0.3 * length * rate)
    before, after = 5.0 + level * rng.standard_normal(), 5.0 + change + level * rng.standard_normal()
    return StepFrames(
        time=time,
        angle=angle,
        before=(before, level),
        after=(after, level),
        voltage_change=2.0,
        noise=noise,
        period=1 / (FREQUENCY * math.sqrt(1 - damping**2)),
        angle_unit="deg",
    )


def read(seen: StepFrames) -> dict[str, Quantity | None]:
    """With the half width of the evaluation, 0.15 periods."""
    return read_step(seen, half_width=0.15 * seen.period)


def value(readings: dict[str, Quantity | None], name: str) -> float:
    """The value of a reading that must be there."""
    quantity = readings[name]
    assert quantity is not None, name
    return quantity.value


@pytest.mark.parametrize("damping", [0.05, 0.12, 0.3, 0.5])
def test_a_noiseless_step_gives_the_closed_forms(damping: float) -> None:
    """Up to what a local quadratic over +- h = 0.15 periods does to a decaying oscillation.

    Its height errs by (3/35) h^4 / 24 of the fourth derivative, at a peak at most wn^4 / sqrt(1 - z^2) of the
    overshoot; its slope by h^2 / 10 of the third, 2 z wn of the second, which moves the peak by h^2 2 z wn / 10 and
    lowers the reading there by half its square times wn^2. The grid adds a hundredth of a period. Crossings: the
    height's error, at most wn^4 of the step, over a slope of a third of the step times wn. At 10 % the window is cut
    off at the onset: a quadratic over a length L = 1.5 / wn misses a cubic by up to 0.4 (L / 2)^3 / 6 of its third
    derivative, wn^3, 0.028, over a slope of 0.4 wn: 0.07 / wn.
    """
    got, root = read(frames(damping)), math.sqrt(1 - damping**2)
    half = 0.15 * 2 * math.pi / root  # h wn
    height, shift, grid = 3 / 35 * half**4 / 24, half**2 * 2 * damping / 10, 2 * math.pi / root / 100
    overshoot = float(percent_overshoot(damping))
    allowed = height / root + (shift + grid) ** 2 / 2
    assert value(got, "percent_overshoot") == pytest.approx(overshoot, rel=allowed)
    assert value(got, "peak_time") * OMEGA == pytest.approx(float(normalised_peak_time(damping)), abs=shift + grid)
    for name, level in (("delay_time_50", 0.5), ("rise_time_0_90", 0.9)):
        expected = float(normalised_crossing_time(damping, level))
        assert value(got, name) * OMEGA == pytest.approx(expected, abs=3 * height)
    expected = float(normalised_crossing_time(damping, 0.9) - normalised_crossing_time(damping, 0.1))
    assert value(got, "rise_time_10_90") * OMEGA == pytest.approx(expected, abs=3 * height + 0.07)
    # the settled levels are known to 1e-6 deg over sqrt(1200) frames
    assert value(got, "static_gain") == pytest.approx(5.0, abs=5 * 1e-6 / math.sqrt(1200))


@pytest.mark.parametrize("damping", [0.05, 0.12, 0.3])
def test_decay_gives_decrement_and_time_constant(damping: float) -> None:
    """Logarithmic decrement 2 pi z / sqrt(1 - z^2) and time constant 1 / (z wn): every extreme is flattened alike, to
    first order.
    """
    got = read(frames(damping))
    assert value(got, "log_decrement") == pytest.approx(2 * math.pi * damping / math.sqrt(1 - damping**2), rel=0.005)
    assert value(got, "time_constant") == pytest.approx(1 / (damping * OMEGA), rel=0.01)


@pytest.mark.parametrize(("damping", "band"), [(0.05, 0.05), (0.12, 0.05), (0.12, 0.02), (0.3, 0.05), (0.3, 0.02)])
def test_settling_is_the_last_exit(damping: float, band: float) -> None:
    """A flattening of 0.28 % of a swing that decays as exp(-z wn t) moves the last exit by far less than a period's
    hundredth.

    The grid is a hundredth of a period; the slope at the exit is at least a third of band times wn: 0.01 / f + 0.0028
    * 3 / wn.
    """
    name = f"settling_time_{round(100 * band)}"
    expected = float(normalised_settling_time(damping, band)) / OMEGA
    assert value(read(frames(damping)), name) == pytest.approx(expected, abs=0.011 / FREQUENCY + 0.0084 / OMEGA)


def test_reversed_steps_read_the_same() -> None:
    """A step down, or a reversed sensor, is the same step with the sign of the gain; the noise of 1e-7 of the step
    aside.
    """
    up, down = read(frames(0.12)), read(frames(0.12, change=-10.0))
    assert value(down, "static_gain") == pytest.approx(-5.0, rel=1e-6)
    for name in (
        "percent_overshoot",
        "peak_time",
        "delay_time_50",
        "rise_time_10_90",
        "settling_time_5",
        "log_decrement",
    ):
        assert value(down, name) == pytest.approx(value(up, name), rel=1e-5)


def test_intervals_hold_the_truth() -> None:
    """60 noisy steps, 60 frames/s, noise 0.5 % of the step: each reading's 95 % interval, binomial at 1e-4.

    The truth is what the same reading makes of the noiseless curve: the window's bias is no scatter.
    """
    truth = read(frames(0.12, rate=60.0, length=3.0))
    names = ("percent_overshoot", "peak_time", "delay_time_50", "rise_time_0_90", "static_gain", "log_decrement")
    seeds = 60
    held = dict.fromkeys(names, 0)
    for seed in range(seeds):
        got = read(frames(0.12, rate=60.0, length=3.0, noise=0.05, seed=seed))
        for name in names:
            quantity = got[name]
            assert quantity is not None
            held[name] += quantity.interval_95[0] <= value(truth, name) <= quantity.interval_95[1]
    assert {n: h for n, h in held.items() if h < binom.ppf(1e-4, seeds, 0.95)} == {}


def test_what_noise_hides_is_not_read() -> None:
    """Noise of 20 % of the step: no settling time within 2 %, and an overshoot of nothing is said with what it could
    hide.
    """
    got = read(frames(0.9, rate=60.0, noise=2.0))
    assert got["settling_time_2"] is None
    assert got["peak_time"] is None
    overshoot = got["percent_overshoot"]
    assert overshoot is not None
    assert overshoot.value == 0.0
    assert overshoot.interval_95[1] > float(percent_overshoot(0.9))


def test_a_hold_that_ends_before_the_angle_settles_has_no_settling_time() -> None:
    """Still outside the band at its last frame."""
    assert read(frames(0.05, length=0.5))["settling_time_5"] is None


# ---- the smoothed curve ----


def test_a_parabola_passes_unchanged_and_frames_apart_are_not_bridged() -> None:
    """A local quadratic reproduces a quadratic and its slope; where fewer than four frames lie in the window there is
    no value.
    """
    time = np.concatenate([np.arange(0, 1, 0.02), np.arange(2, 3, 0.02)])
    curve = SmoothCurve(time=time, angle=3 - 2 * time + 0.5 * time**2, half_width=0.1, noise=0.1)
    instants = np.array([0.2, 0.55, 1.5, 2.5])
    got, slope, spread = curve.at(instants)
    good = [0, 1, 3]
    np.testing.assert_allclose(got[good], (3 - 2 * instants + 0.5 * instants**2)[good], atol=1e-12)
    np.testing.assert_allclose(slope[good], (instants - 2)[good], atol=1e-10)
    assert np.isnan([got[2], slope[2], spread[2]]).all()


def test_noise_is_reduced_as_the_formula_says() -> None:
    """In the middle of many frames the variance is 2.25 s^2 / n (Savitzky & Golay 1964), to order 1 / n."""
    time = np.arange(0, 2, 0.001)
    curve = SmoothCurve(time=time, angle=np.zeros(2000), half_width=0.1, noise=0.3)
    _, _, spread = curve.at(np.array([1.0]))
    assert spread[0] ** 2 == pytest.approx(2.25 * 0.09 / 200, rel=0.02)


# ---- pooling ----


def normal(value: float, u: float) -> Quantity:
    """A quantity in s."""
    return Quantity.normal(value, "s", u)


def test_pooling_is_the_weighted_mean() -> None:
    """Two readings of 1 and 2 s with uncertainties of 1 and 2 s: (1 + 2/4) / (1 + 1/4) = 1.2 s, 2 / sqrt(5) s."""
    pooled = pool([normal(1.0, 1.0), normal(2.0, 2.0)])
    assert pooled is not None
    assert pooled.value == pytest.approx(1.2)
    assert pooled.standard_uncertainty == pytest.approx(2 / math.sqrt(5))


def test_scatter_beyond_the_uncertainties_counts() -> None:
    """Readings of 1, 2, 3 s with 0.01 s each: the standard uncertainty is that of their mean, with Student's t of two
    degrees.
    """
    pooled = pool([normal(v, 0.01) for v in (1.0, 2.0, 3.0)])
    assert pooled is not None
    assert pooled.standard_uncertainty == pytest.approx(1 / math.sqrt(3))
    assert pooled.expanded_uncertainty == pytest.approx(coverage_factor(2) / math.sqrt(3))


def test_pooling_nothing_and_one() -> None:
    """Nothing stays undetermined; one reading stays as it is."""
    assert pool([]) is None
    assert pool([normal(3.0, 0.5)]) == normal(3.0, 0.5)
