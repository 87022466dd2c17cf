"""How many volts is digital full scale? A small tone is played, a meter is read, the loopback is listened to.

The tone lies well above the rig's natural frequency, so that the rig hardly moves, at the bias, faded in and out. With
the meter's reading r (true rms of the alternating part) and the digital amplitudes d sent and l recorded,

    output full scale = r sqrt(2) / d,    loopback full scale = r sqrt(2) / l.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from excitation.profile import Profile
from freqid.errors import CaptureError
from freqid.quantity import in_unit
from freqid.rig import Rig

__all__ = ["Calibration", "calibration_from_reading", "calibration_tone", "tone_amplitude"]

PART_OF_LIMIT = 0.1  # of the voltage between bias and limit
TIMES_RESONANCE = 10.0
USUAL_FREQUENCY = 100.0  # Hz; meters read it well
LOWEST, HIGHEST = 40.0, 400.0  # Hz, what most meters read to their stated uncertainty
OF_SAMPLE_RATE = 0.2
FADE = 0.2  # s
SMALLEST = 1e-4  # of full scale: below it a channel carries no tone
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Calibration:
    """What the sheet says, and what the meter says instead."""

    frequency: float = in_unit("Hz")
    expected_reading: float = in_unit("V")  # rms, by the sheet
    reading: float | None = in_unit("V")  # rms, None: not read
    output_full_scale: float | None = in_unit("V")
    loopback_full_scale: float | None = in_unit("V")


def calibration_tone(rig: Rig, *, limit: float, duration: float) -> Profile:
    """The tone; `limit` is the largest voltage (V) that rig and output allow."""
    rate, bias = rig.output.sample_rate, rig.limits.bias
    resonance = rig.step_test.natural_frequency
    frequency = USUAL_FREQUENCY if resonance is None else TIMES_RESONANCE * resonance
    frequency = min(float(np.clip(frequency, LOWEST, HIGHEST)), OF_SAMPLE_RATE * rate)
    amplitude = PART_OF_LIMIT * (limit - abs(bias))
    steepest = 2 * math.pi * frequency
    amplitude = min(amplitude, 0.9 * rig.limits.slew_rate / steepest)
    time = np.arange(round(duration * rate)) / rate
    fade = np.clip(np.minimum(time, time[-1] - time) / FADE, 0.0, 1.0)
    voltage = bias + amplitude * (1 - np.cos(np.pi * fade)) / 2 * np.sin(2 * np.pi * frequency * time)
    return Profile(
        voltage=voltage, sample_rate=rate, hold=rig.output.hold, bias=bias, kind="other",
        settings={"frequency": frequency, "amplitude": amplitude},
    )  # fmt: skip


def tone_amplitude(values: Floats, *, sample_rate: float, frequency: float) -> float:
    """Amplitude of the tone in a record (N,) taken where the tone stands, by least squares."""
    angle = 2 * np.pi * frequency * np.arange(values.size) / sample_rate
    columns = np.stack([np.cos(angle), np.sin(angle), np.ones_like(angle)], axis=1)
    cosine, sine, _ = np.linalg.lstsq(columns, values, rcond=None)[0]
    return float(math.hypot(cosine, sine))


def calibration_from_reading(
    tone: Profile, *, reading: float | None, rig: Rig, loopback_amplitude: float | None
) -> Calibration:
    """Full scales from the meter's reading (V rms); `loopback_amplitude` is digital, None without a loopback.

    Raises
    ------
    CaptureError
        The loopback carries no tone.
    """
    amplitude: float = tone.settings["amplitude"]
    if loopback_amplitude is not None and loopback_amplitude < SMALLEST:
        raise CaptureError(
            f"calibrate: the loopback shows {loopback_amplitude:.2g} of full scale, no tone; connect it, name its"
            " channel with --loopback-channel, or give --loopback-channel none"
        )
    peak = None if reading is None else reading * math.sqrt(2)
    loopback = None if peak is None or loopback_amplitude is None else peak / loopback_amplitude
    return Calibration(
        frequency=tone.settings["frequency"],
        expected_reading=amplitude / math.sqrt(2),
        reading=reading,
        output_full_scale=None if peak is None else peak * rig.output.full_scale / amplitude,
        loopback_full_scale=loopback,
    )
