"""Which sweep covers a band once, within the limits of the rig?

    rest | sweep, faded in and out | rest

The exponential sweep is the synchronised one, x(t) = sin(2 pi f1 L exp(t / L)) with L = T / ln(f2 / f1):
shifted by L ln m it is its own m-th harmonic, sin(m theta(t)) = x(t + L ln m), so distortion of order m
arrives as a copy ahead by L ln m. The linear sweep is sin(2 pi (f1 t + (f2 - f1) t^2 / (2 T))). The amplitude follows
what the limits allow at each frequency (`excitation.sweep_shape`); how fast a resonance may be passed says
`excitation.sweep_rate`.

Source: A. Novak, P. Lotton, L. Simon, J. Audio Engineering Society 63 (2015) 786-798,
doi:10.17743/jaes.2015.0071.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import get_args

import numpy as np

from excitation.amplitude import scaled_to_limits
from excitation.errors import ExcitationError
from excitation.limits import Limits
from excitation.profile import Floats, Hold, Profile
from excitation.rig_model import RigModel
from excitation.sweep_rate import Course
from excitation.sweep_shape import SweepCourse, safe_envelope
from excitation.timing import check_timing, fade_in, lead_in_samples, ring_down_time

__all__ = ["Course", "SweptSineSettings", "design_swept_sine", "exponential_sweep", "linear_sweep"]

_LONGEST_FADE = 0.05  # of the sweep


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SweptSineSettings:
    """What the sweep is to be.

    Attributes
    ----------
    band : (low, high)
        Hz, where the sweep starts and ends. high must stay below half the sample rate.
    duration : float
        s, in all, rests included.
    sample_rate : float
        Hz.
    limits : Limits
        Of the rig; the bias is among them.
    hold : "zero-order" or "smooth"
        What the output does between the samples.
    course : "exponential" or "linear"
        Of the frequency in time.
    rigs : sequence of RigModel
        All that the true rig may be; without any the swing is not limited.
    margin : float
        The part of the way to the stops that may be used.
    amplitude : float or None
        Peak departure from the bias in V; None for the largest allowed.
    """

    band: tuple[float, float] = field(metadata={"unit": "Hz"})
    duration: float = field(metadata={"unit": "s"})
    sample_rate: float = field(metadata={"unit": "Hz"})
    limits: Limits
    hold: Hold = "zero-order"
    course: Course = "exponential"
    rigs: Sequence[RigModel] = ()
    margin: float = 0.9
    amplitude: float | None = field(default=None, metadata={"unit": "V"})


def exponential_sweep(time: Floats, *, band: tuple[float, float], duration: float) -> Floats:
    """Synchronised exponential sweep at the times (M,) in s, from band[0] at 0 to band[1] at `duration`."""
    rate_constant = duration / math.log(band[1] / band[0])
    return np.asarray(np.sin(2 * np.pi * band[0] * rate_constant * np.exp(time / rate_constant)))


def linear_sweep(time: Floats, *, band: tuple[float, float], duration: float) -> Floats:
    """Linear sweep at the times (M,) in s, from band[0] at 0 to band[1] at `duration`."""
    return np.asarray(np.sin(2 * np.pi * (band[0] * time + (band[1] - band[0]) * time**2 / (2 * duration))))


def design_swept_sine(settings: SweptSineSettings) -> Profile:
    """Design the sweep: over the whole band once, at the bias on both ends, within all limits at every frequency.

    `settings` of the profile record what an evaluation needs: the course, where the sweep starts, how long it
    is and how long it fades.

    Raises
    ------
    ExcitationError
        The settings do not go together.
    LimitExceeded
        The amplitude asked for passes a limit.
    """
    if settings.course not in get_args(Course):
        raise ExcitationError(f"course: {settings.course!r} is none of {', '.join(get_args(Course))}")
    check_timing(settings.band, duration=settings.duration, sample_rate=settings.sample_rate)
    rate, bias = settings.sample_rate, settings.limits.bias
    n_samples = round(settings.duration * rate)
    lead = lead_in_samples(n_samples, rate)
    rest = max(1, round(ring_down_time(settings.rigs, band=settings.band, duration=settings.duration) * rate))
    n_sweep = n_samples - lead - rest
    sweep, (n_in, n_out) = _faded_sweep(settings, n_sweep)
    departure = np.zeros(n_samples)
    departure[lead : lead + n_sweep] = sweep
    unit = Profile(
        voltage=bias + departure,
        sample_rate=rate,
        hold=settings.hold,
        bias=bias,
        kind="swept-sine",
        band=settings.band,
        settings={
            "course": settings.course,
            "margin": settings.margin,
            "sweep_start_s": lead / rate,
            "sweep_duration_s": n_sweep / rate,
            "fade_in_s": n_in / rate,
            "fade_out_s": n_out / rate,
        },
    )
    shaped = _shaped(unit, settings, lead, n_sweep)
    return scaled_to_limits(
        shaped, settings.limits, settings.rigs, margin=settings.margin, amplitude=settings.amplitude
    )


def _shaped(unit: Profile, settings: SweptSineSettings, start: int, n_sweep: int) -> Profile:
    """The sweep with the amplitude that the limits allow at each frequency."""
    limits = settings.limits
    time = np.arange(n_sweep, dtype=np.float64) / settings.sample_rate
    course = SweepCourse(unit=unit, start=start, frequency=_frequency(settings, time, n_sweep / settings.sample_rate))
    room = limits.voltage - abs(limits.bias)
    largest = room if settings.amplitude is None or not settings.amplitude > 0 else min(room, settings.amplitude)
    envelope = safe_envelope(course, limits, settings.rigs, margin=settings.margin, largest=largest)
    voltage = unit.voltage.copy()
    voltage[start : start + n_sweep] = unit.bias + (voltage[start : start + n_sweep] - unit.bias) * envelope
    return replace(unit, voltage=voltage)


def _frequency(settings: SweptSineSettings, time: Floats, duration: float) -> Floats:
    """Frequency of the sweep in Hz at the times (N,) in s."""
    low, high = settings.band
    if settings.course == "linear":
        return low + (high - low) * time / duration
    return np.asarray(low * np.exp(time / duration * math.log(high / low)))


def _faded_sweep(settings: SweptSineSettings, n_sweep: int) -> tuple[Floats, tuple[int, int]]:
    """The sweep at unit amplitude and the samples of its two fades: a period of each band edge, at most 5 % each."""
    rate = settings.sample_rate
    course = exponential_sweep if settings.course == "exponential" else linear_sweep
    sweep = course(np.arange(n_sweep, dtype=np.float64) / rate, band=settings.band, duration=n_sweep / rate)
    longest = max(2, int(_LONGEST_FADE * n_sweep))
    n_in, n_out = (min(longest, max(2, round(rate / edge))) for edge in settings.band)
    sweep[:n_in] *= fade_in(n_in)
    sweep[n_sweep - n_out :] *= fade_in(n_out)[::-1]
    return sweep, (n_in, n_out)
