"""Is a multisine what it claims: periodic, on its lines, at rest on both ends, inside the limits?"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from spring_vane import Vane

from excitation import (
    ExcitationError,
    LimitExceeded,
    Limits,
    MultisineSettings,
    Profile,
    design_multisine,
    find_resonance,
    lay_out_multisine,
    predicted_swing,
    worst_swing,
)


def _settings(limits: Limits, **changes: Any) -> MultisineSettings:
    settings = {"band": (0.4, 10.0), "duration": 40.0, "sample_rate": 200.0, "limits": limits, "phases": "schroeder"}
    return MultisineSettings(**{**settings, **changes})


def _spectrum(profile: Profile) -> np.ndarray:
    period = profile.voltage[profile.steady_start : profile.steady_start + profile.period_samples] - profile.bias
    return np.abs(np.fft.rfft(period)) / period.size * 2


@pytest.mark.parametrize("grid", ["full", "odd", "odd-gapped"])
@pytest.mark.parametrize("phases", ["low-peak", "random", "schroeder"])
def test_steady_part_holds_its_lines_and_nothing_else(limits: Limits, grid: str, phases: str) -> None:
    """Every period repeats the one before to the last bit; its spectrum is flat on the lines and empty beside them."""
    profile = design_multisine(_settings(limits, grid=grid, phases=phases))
    steady = profile.voltage[profile.steady_start : profile.steady_stop].reshape(profile.n_periods, -1)
    assert profile.n_periods >= 3
    assert np.array_equal(steady, np.broadcast_to(steady[0], steady.shape))
    amplitude = _spectrum(profile)
    harmonics = np.round(profile.lines * profile.period_samples / profile.sample_rate).astype(int)
    beside = np.delete(amplitude, harmonics)
    # transforms of some 10^3 samples of unit size round at 1e-15 of the largest each
    np.testing.assert_allclose(amplitude[harmonics], amplitude[harmonics[0]], rtol=1e-11)
    assert np.max(beside) < 1e-12 * profile.peak_voltage
    assert profile.lines[0] >= 0.4
    assert profile.lines[-1] <= 10.0


def test_odd_grid_is_half_wave_symmetric(limits: Limits) -> None:
    """Odd lines only: with a period of an even number of samples the second half is minus the first."""
    profile = design_multisine(_settings(limits, period=8.0))
    first, second = profile.voltage[profile.steady_start :][:1600].reshape(2, 800)
    # both halves come from one transform: rounding of its size
    np.testing.assert_allclose(second, -first, rtol=0, atol=1e-12)


@pytest.mark.parametrize("seed", range(5))
def test_gaps_leave_out_one_odd_line_of_four(limits: Limits, seed: int) -> None:
    """By default one odd line of each four is missing, at random, but neither an end nor two neighbours."""
    odd = lay_out_multisine(_settings(limits, grid="odd")).harmonics
    gapped = lay_out_multisine(_settings(limits, seed=seed)).harmonics
    assert set(gapped) < set(odd)
    missing = np.flatnonzero(~np.isin(odd, gapped))
    assert (missing // 4).tolist() == list(range(odd.size // 4))
    assert np.min(np.diff(missing)) > 1 and missing[0] > 0 and missing[-1] < odd.size - 1
    assert not np.array_equal(gapped, lay_out_multisine(_settings(limits, seed=seed + 5)).harmonics)


@pytest.mark.parametrize("grid", ["odd-gapped", "odd", "full"])
def test_detection_lines_are_what_the_drive_leaves_free(limits: Limits, grid: str) -> None:
    """Lines and detection lines are all multiples of 1/period between the ends, sorted by parity."""
    profile = design_multisine(_settings(limits, grid=grid, period=8.0))
    even, odd = (np.round(lines * 8).astype(int) for lines in profile.detection_lines)
    excited = np.round(profile.lines * 8).astype(int)
    together = np.concatenate([excited, even, odd])
    assert sorted(together) == list(range(excited[0], excited[-1] + 1))
    assert np.all(even % 2 == 0) and np.all(odd % 2 == 1)
    assert (even.size > 0, odd.size > 0) == {"odd-gapped": (True, True), "odd": (True, False)}.get(grid, (False, False))
    assert design_multisine(_settings(limits, grid="full", phases="random")).detection_lines[0].size == 0


def test_distortion_shows_on_the_detection_lines(limits: Limits, vane: Vane) -> None:
    """Behind a rig that distorts, squares stand on even lines alone, cubes on odd ones, the omitted ones among them."""
    profile = design_multisine(_settings(limits, period=8.0, rigs=[vane], power="informative"))
    period = profile.voltage[profile.steady_start : profile.steady_start + 1600]
    even, odd = (np.round(lines * 8).astype(int) for lines in profile.detection_lines)
    square, cube = (np.abs(np.fft.rfft(period**power)) / 800 for power in (2, 3))
    rounding = 1e-12 * profile.peak_voltage**3  # transforms of 1600 samples round at some 1e-15 of the largest
    assert np.max(square[odd]) < rounding < 1e-3 < np.sqrt(np.mean(square[even] ** 2))
    assert np.max(cube[even]) < rounding < 1e-3 < np.sqrt(np.mean(cube[odd] ** 2))


@pytest.mark.parametrize("bias", [0.0, -1.3])
def test_rests_at_the_bias_on_both_ends(limits: Limits, bias: float) -> None:
    """Half a second before, a second after, exactly the bias; the length is as asked."""
    profile = design_multisine(_settings(replace(limits, bias=bias)))
    assert profile.voltage.size == 8000
    assert np.all(profile.voltage[:101] == bias)  # 0.5 s of rest and the first sample of the ramp
    assert np.all(profile.voltage[-200:] == bias)
    assert np.any(profile.voltage[101:150] != bias)


def test_ramp_is_the_periodic_signal_faded_in(limits: Limits) -> None:
    """Just before the steady part the voltage is that of a period later, but for the last step of the fade."""
    profile = design_multisine(_settings(limits))
    before, after = profile.steady_start - 1, profile.steady_start - 1 + profile.period_samples
    ramp = round(0.25 * profile.period_samples)
    last_weight = 0.5 + 0.5 * math.cos(math.pi / ramp)
    assert profile.voltage[before] == pytest.approx(last_weight * profile.voltage[after], rel=1e-12)


def test_largest_amplitude_stands_at_the_limit_that_binds(limits: Limits, vane: Vane) -> None:
    """Voltage, slew rate or swing: whichever binds is used up to the rounding kept free, the others are not passed."""
    free = design_multisine(_settings(limits))
    assert free.settings["amplitude_limited_by"] == "voltage"
    assert 5.0 * (1 - 2e-9) < free.peak_voltage <= 5.0
    slow = design_multisine(_settings(replace(limits, slew_rate=20.0)))
    assert slow.settings["amplitude_limited_by"] == "slew rate"
    assert 20.0 * (1 - 2e-9) < slow.max_slew_rate <= 20.0
    stopped = design_multisine(_settings(limits, rigs=[vane]))
    assert stopped.settings["amplitude_limited_by"] == "swing"
    assert 27.0 * (1 - 2e-9) < predicted_swing(stopped, vane) <= 27.0


def test_all_rigs_stay_clear_of_the_stops(limits: Limits, vane: Vane) -> None:
    """With the corners of an uncertain rig handed in, the worst of them uses the margin up."""
    rigs = [vane] + [replace(vane, natural_frequency=f, damping_ratio=z) for f in (2.85, 3.15) for z in (0.096, 0.144)]
    profile = design_multisine(_settings(limits, rigs=rigs, margin=0.8))
    assert 24.0 * (1 - 2e-9) < worst_swing(profile, rigs) <= 24.0


def test_phases_make_room_at_the_stops(limits: Limits, vane: Vane) -> None:
    """Near a resonance, phases that lower the peak of the angle let through half as much voltage again, and more."""
    lowered = design_multisine(_settings(limits, rigs=[vane], phases="low-peak"))
    random = [design_multisine(_settings(limits, rigs=[vane], phases="random", seed=seed)) for seed in range(5)]
    assert lowered.rms > 1.5 * np.median([profile.rms for profile in random])


def test_requested_amplitude_is_kept_or_refused(limits: Limits, vane: Vane) -> None:
    """An amplitude within the limits is met; one beyond is refused with the largest that passes."""
    met = design_multisine(_settings(limits, amplitude=0.2, rigs=[vane]))
    assert met.peak_voltage == pytest.approx(0.2, rel=1e-12)
    message = r"4 V asked for, but the predicted swing would be .* of .* allowed"
    with pytest.raises(LimitExceeded, match=message) as caught:
        design_multisine(_settings(limits, amplitude=4.0, rigs=[vane]))
    most = float(str(caught.value).split("at most ")[1].split(" V")[0])
    assert design_multisine(_settings(limits, amplitude=most * 0.99999, rigs=[vane])).peak_voltage > 0.9999 * most


def test_line_amplitudes_are_those_handed_in(limits: Limits) -> None:
    """Given amplitudes appear on the lines in their ratio."""
    layout = lay_out_multisine(_settings(limits))
    wanted = 1 / layout.lines
    amplitude = _spectrum(design_multisine(_settings(limits, line_amplitudes=wanted)))[layout.harmonics]
    np.testing.assert_allclose(amplitude / amplitude[0], wanted / wanted[0], rtol=1e-10)


def test_resonance_is_resolved_where_the_duration_allows(limits: Limits, vane: Vane) -> None:
    """With a rig the excited lines lie at least four to the half-power width, in as many periods as fit, 3 to 6."""
    width = 2 * vane.damping_ratio * vane.natural_frequency
    for duration, grid in ((40.0, "full"), (60.0, "odd"), (120.0, "odd")):
        layout = lay_out_multisine(_settings(limits, duration=duration, grid=grid, rigs=[vane]))
        assert np.max(np.diff(layout.lines)) <= width / 3.9  # the width itself is 2 zeta fn only to first order
        assert 3 <= layout.n_periods <= 6
    assert lay_out_multisine(_settings(limits, duration=20.0, rigs=[vane])).n_periods == 3


@pytest.mark.parametrize("damping_ratio", [0.005, 0.05, 0.12, 0.3])
def test_half_power_width_in_closed_form(damping_ratio: float) -> None:
    """The half-power points lie at f^2/fn^2 = 1 - 2 z^2 ± 2 z sqrt(1 - z^2), the peak at 1 - 2 z^2."""
    resonance = find_resonance(Vane(damping_ratio=damping_ratio), band=(0.1, 40.0))
    z = damping_ratio
    edges = np.sqrt(1 - 2 * z**2 + np.array([-2, 2]) * z * math.sqrt(1 - z**2))
    spacing = 3.0 * math.log(400) / 20_000  # of the search grid at 3 Hz: 9e-4 Hz; two edges, each up to 1.3 times that
    assert resonance is not None
    assert resonance.half_power_width == pytest.approx(3.0 * (edges[1] - edges[0]), abs=2.6 * spacing)
    assert resonance.frequency == pytest.approx(3.0 * math.sqrt(1 - 2 * z**2), abs=spacing)


def test_flat_or_overdamped_rig_has_no_resonance() -> None:
    """Without a peak there is no width, and the period is chosen as without a rig."""
    assert find_resonance(Vane(damping_ratio=0.8), band=(0.1, 40.0)) is None


def test_same_seed_same_voltage(limits: Limits) -> None:
    """A seed determines the profile; another gives another."""
    first, again, other = (design_multisine(_settings(limits, phases="random", seed=s)).voltage for s in (1, 1, 2))
    assert np.array_equal(first, again)
    assert not np.array_equal(first, other)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"band": (10.0, 0.4)}, "the lower first"),
        ({"band": (0.0, 4.0)}, "above 0"),
        ({"band": (0.4, 100.0)}, "not below 100 Hz, half the sample rate"),
        ({"band": (0.4, math.nan)}, "above 0"),
        ({"band": (3.0, 3.2)}, "at least 3 are needed"),
        ({"duration": 5.0}, "fewer than 3 periods of the lower band edge"),
        ({"duration": -1.0}, "duration: -1"),
        ({"duration": 1e7}, "shorten the test"),
        ({"sample_rate": math.inf}, "sample_rate: inf"),
        ({"grid": "even"}, "grid: 'even'"),
        ({"phases": "zero"}, "phases: 'zero'"),
        ({"period": 30.0}, "leaves fewer than 2 periods"),
        ({"margin": 0.0}, "margin"),
        ({"amplitude": 0.0}, "amplitude"),
        ({"line_amplitudes": np.ones(3)}, "ask lay_out_multisine"),
    ],
)
def test_settings_that_do_not_go_together_are_refused(limits: Limits, changes: dict[str, Any], message: str) -> None:
    """Each impossible setting is told with its value and what to do, in one line."""
    with pytest.raises(ExcitationError, match=message) as caught:
        design_multisine(_settings(limits, **changes))
    assert "\n" not in str(caught.value)
