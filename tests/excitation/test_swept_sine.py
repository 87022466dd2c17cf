"""Does the sweep cover its band, and is the exponential one synchronised?"""

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
    Profile,
    SweptSineSettings,
    design_swept_sine,
    exponential_sweep,
    linear_sweep,
    predicted_swing,
    scaled_to_limits,
)


def _settings(limits: Limits, **changes: Any) -> SweptSineSettings:
    settings = {"band": (0.5, 12.0), "duration": 30.0, "sample_rate": 500.0, "limits": limits}
    return SweptSineSettings(**{**settings, **changes})


@pytest.mark.parametrize("order", [2, 3, 5])
def test_shift_gives_the_harmonic(order: int) -> None:
    """Shifted by L ln m, sin(theta) becomes sin(m theta): Novak, Lotton, Simon, JAES 63 (2015) 786."""
    band, duration = (10.0, 1000.0), 5.0
    rate_constant = duration / math.log(100)
    assert rate_constant == pytest.approx(1.085736, abs=5e-7)  # L for this sweep, to its six published decimals
    time = np.linspace(0, duration, 20_001)
    theta = 2 * np.pi * band[0] * rate_constant * np.exp(time / rate_constant)
    shifted = exponential_sweep(time + rate_constant * math.log(order), band=band, duration=duration)
    # theta reaches 6.8e3 rad; m theta carries a rounding of some m * 1e-16 * 6.8e3
    np.testing.assert_allclose(shifted, np.sin(order * theta), rtol=0, atol=order * 1e-11)


@pytest.mark.parametrize("sweep", [exponential_sweep, linear_sweep])
def test_sweep_starts_and_ends_at_the_band_edges(sweep: Any) -> None:
    """Between neighbouring zeros lies half a period: the first and the last of them tell the band edges."""
    band, duration = (2.0, 50.0), 30.0
    time = np.linspace(0, duration, 600_001)
    voltage = sweep(time, band=band, duration=duration)
    before = np.flatnonzero(np.sign(voltage[:-1]) != np.sign(voltage[1:]))
    step = time[1]
    zeros = time[before] + step * voltage[before] / (voltage[before] - voltage[before + 1])
    frequency, middle = 0.5 / np.diff(zeros), (zeros[:-1] + zeros[1:]) / 2
    # carried on to the ends in a straight line; over half a period the frequency changes by 2 % at most, so its
    # curvature is of second order; linear interpolation of a zero is exact to (2 pi 50 Hz 50 us)^2 / 6 of a step
    start = frequency[0] - (frequency[1] - frequency[0]) / (middle[1] - middle[0]) * middle[0]
    end = frequency[-1] + (frequency[-1] - frequency[-2]) / (middle[-1] - middle[-2]) * (duration - middle[-1])
    assert start == pytest.approx(band[0], rel=2e-3)
    assert end == pytest.approx(band[1], rel=2e-3)


@pytest.mark.parametrize("course", ["exponential", "linear"])
@pytest.mark.parametrize("bias", [0.0, 0.7])
def test_profile_rests_fades_and_stays_inside(limits: Limits, vane: Vane, course: str, bias: float) -> None:
    """At the bias on both ends, as long as asked, at the stops' margin and below every other limit."""
    profile = design_swept_sine(_settings(replace(limits, bias=bias), course=course, rigs=[vane]))
    assert profile.voltage.size == 15_000
    assert np.all(profile.voltage[:251] == bias)
    assert np.all(profile.voltage[-500:] == bias)
    assert 27.0 * (1 - 2e-9) < predicted_swing(profile, vane) <= 27.0
    limits.check_profile(profile)
    record = profile.settings
    first = round(record["sweep_start_s"] * 500)
    last = first + round(record["sweep_duration_s"] * 500)
    # raised cosines over 1000 samples at 0.5 Hz and 42 at 12 Hz: weights of 1e-5 and 5.6e-3 two steps from the end
    assert np.max(np.abs(profile.voltage[first : first + 3] - bias)) <= 1e-4 * profile.peak_voltage
    assert 0 < np.max(np.abs(profile.voltage[last - 3 : last] - bias)) <= 6e-3 * profile.peak_voltage


def test_recorded_course_rebuilds_the_samples(limits: Limits) -> None:
    """Between the fades the samples are the sweep that start, duration and amplitude in the record describe."""
    profile = design_swept_sine(_settings(limits))
    record = profile.settings
    time = profile.time - record["sweep_start_s"]
    between = (time >= record["fade_in_s"]) & (time < record["sweep_duration_s"] - record["fade_out_s"])
    sweep = exponential_sweep(time[between], band=(0.5, 12.0), duration=record["sweep_duration_s"])
    # the peak of the faded sweep is its amplitude but for 1 - cos(pi 12 Hz / 500 Hz) = 2.8e-3 between the points
    np.testing.assert_allclose(profile.voltage[between], record["amplitude_V"] * sweep, rtol=0, atol=5 * 2.9e-3)


def test_band_is_driven_and_the_rest_is_not(limits: Limits) -> None:
    """Nearly all of the energy lies within the band."""
    profile = design_swept_sine(_settings(limits))
    energy = np.abs(np.fft.rfft(profile.voltage)) ** 2
    frequency = np.fft.rfftfreq(profile.voltage.size, 1 / 500.0)
    inside = (frequency > 0.45) & (frequency < 13.0)
    # fades of a period of each edge spread it by about a tenth of the edge; beyond that it falls off steeply
    assert energy[inside].sum() > 0.99 * energy.sum()


def test_bad_settings_are_refused(limits: Limits, vane: Vane) -> None:
    """An unknown course, a band above half the rate and an amplitude beyond the stops are told with figures."""
    with pytest.raises(ExcitationError, match="course: 'cubic'"):
        design_swept_sine(_settings(limits, course="cubic"))
    with pytest.raises(ExcitationError, match="half the sample rate"):
        design_swept_sine(_settings(limits, band=(1.0, 300.0)))
    with pytest.raises(LimitExceeded, match=r"2 V asked for, but the predicted swing would be .* of 27 allowed"):
        design_swept_sine(_settings(limits, amplitude=2.0, band=(2.5, 3.5), rigs=[vane]))


@pytest.mark.parametrize("course", ["exponential", "linear"])
def test_amplitude_follows_what_each_frequency_allows(limits: Limits, vane: Vane, course: str) -> None:
    """Large beside the resonance, small on it: the swing is used up at most frequencies, the voltage where it binds."""
    profile = design_swept_sine(_settings(limits, course=course, rigs=[vane], duration=60.0))
    plain = design_swept_sine(_settings(limits, course=course, rigs=[replace(vane, gain=1e-9)], duration=60.0))
    assert profile.peak_voltage > 4.5  # above the resonance the limit is the voltage of 5 V
    angle = vane.motion(profile)[:, 0]
    low, high = _samples_at(profile, (2.0, 4.0))
    # one cycle at 2 Hz is 250 samples; the angle is large in each cycle of the sweep through the resonance
    cycles = np.abs(angle[low : low + (high - low) // 250 * 250]).reshape(-1, 250).max(axis=1)
    assert np.min(cycles) > 0.7 * 27 and np.max(cycles) <= 27.0
    constant = scaled_to_limits(plain, limits, [vane])
    assert constant.rms < 0.5 * profile.rms  # one amplitude for all frequencies is what the resonance allows


def _samples_at(profile: Profile, frequencies: tuple[float, float]) -> list[int]:
    """First samples at which the sweep is at the frequencies, by its record."""
    record, (low, high) = profile.settings, (0.5, 12.0)
    if record["course"] == "linear":
        parts = [(frequency - low) / (high - low) for frequency in frequencies]
    else:
        parts = [math.log(frequency / low) / math.log(high / low) for frequency in frequencies]
    times = [record["sweep_start_s"] + part * record["sweep_duration_s"] for part in parts]
    return [round(time * profile.sample_rate) for time in times]


@pytest.mark.parametrize(("order", "published"), [(2, 0.75257), (3, 1.19280)])
def test_harmonics_lead_as_published(order: int, published: float) -> None:
    """Through a distorting rig, the copy of order n is ahead by L ln n: 10 to 1000 Hz in 5 s, L = 1.085736 s.

    Novak, Lotton, Simon 2015; the lead by A. Farina, AES Convention 108 (2000), as quoted from memory.
    """
    rate = 4096.0
    duration = 5.5 / 0.85  # 0.5 s of rest before and 15 % of all after leave 5 s
    profile = design_swept_sine(SweptSineSettings(
        band=(10.0, 1000.0), duration=duration, sample_rate=rate, hold="smooth",
        limits=Limits(voltage=1.0, slew_rate=math.inf, angle=1e9),
    ))  # fmt: skip
    assert profile.settings["sweep_duration_s"] == pytest.approx(5.0, abs=2 / rate)
    distorted = profile.voltage + 0.2 * profile.voltage**order
    n_padded = 4 * profile.voltage.size
    driven, answered = np.fft.rfft(profile.voltage, n_padded), np.fft.rfft(distorted, n_padded)
    frequency = np.fft.rfftfreq(n_padded, 1 / rate)
    inside = (frequency > 20.0) & (frequency < 900.0)
    spectrum = np.zeros(n_padded, dtype=complex)  # of positive frequencies alone: the magnitude has no phase to mind
    spectrum[: frequency.size][inside] = answered[inside] / driven[inside]
    impulse = np.fft.ifft(spectrum)
    lead = np.arange(n_padded, 0, -1) / rate  # of the sample, going back from the end of the circle
    near = np.abs(lead - published) < 0.1
    # a band of 880 Hz makes an impulse some 1/880 s wide; its largest sample lies within one sample of its middle
    found = lead[near][np.argmax(np.abs(impulse[near]))]
    assert found == pytest.approx(published, abs=1.5 / rate)
