"""Which periodic voltage, holding a chosen set of frequencies, tells most within the limits of the rig?

    rest | ramp-up | whole periods | ramp-down | rest

The rest before makes the onset visible, the one after lets the ring-down die away. The ramps are the
periodic signal itself, faded in and out, so the voltage leaves the bias and returns to it smoothly.
The phases make room where the limits are: at the voltage, at its slope, or at the stops of the angle.

Source: R. Pintelon, J. Schoukens, System Identification: A Frequency Domain Approach (2nd ed., 2012),
chapters 2 and 5.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace

import numpy as np

from excitation.amplitude import scaled_to_limits
from excitation.crest_factor import (
    largest_peak,
    lower_peak,
    multisine_waveform,
    random_phases,
    schroeder_phases,
)
from excitation.errors import ExcitationError
from excitation.information_criterion import LineInformation
from excitation.joint_descent import PeakLimits, lower_jointly
from excitation.multisine_layout import MultisineLayout, MultisineSettings, lay_out_multisine
from excitation.power_allocation import informative_amplitudes
from excitation.profile import Floats, Profile
from excitation.rig_model import Complexes, RigModel, response_of
from excitation.swing import hold_response, worst_swing
from excitation.timing import fade_in

__all__ = ["design_multisine"]

_ROUNDS = (0, 6)  # of the allocation, for the starts of the descent
_DISTURBANCE = 0.3  # rad rms, of Schroeder's phases: another one for each start and seed
_ONSETS = 16  # places of the period tried to begin with
_ONSET_POINTS = 16  # per period of the highest line, while these are compared
_RIGS_WEIGHED = 9  # whose angle the phases take into account


def design_multisine(settings: MultisineSettings) -> Profile:
    """Design the multisine: exactly periodic in its steady part, at the bias on both ends, within all limits.

    Raises
    ------
    ExcitationError
        The settings do not go together.
    LimitExceeded
        The amplitude asked for passes a limit.
    """
    layout = lay_out_multisine(settings)
    if settings.power == "flat" or not settings.rigs or settings.line_amplitudes is not None:
        amplitudes = _given_amplitudes(settings, layout.lines.size)
        phases = _choose_phases(settings, layout, amplitudes)
        return _with_lines(settings, layout, amplitudes * np.exp(1j * phases))
    information = LineInformation(layout.lines, _rigs_weighed(settings))
    candidates = _informative_lines(settings, layout, information)
    best = min(candidates, key=lambda lines: information.criterion(np.abs(lines) ** 2))
    return _with_lines(settings, layout, best)


def _with_lines(settings: MultisineSettings, layout: MultisineLayout, lines: Complexes) -> Profile:
    """The multisine with the given complex amplitudes (F,), as large as allowed."""
    period = multisine_waveform(lines, harmonics=layout.harmonics, n_samples=layout.period_samples)
    if settings.phases == "low-peak" and settings.rigs:
        period = np.roll(period, -_quietest_onset(period, layout, settings))
    unscaled = Profile(
        voltage=settings.limits.bias + _with_ramps(period, layout) / np.max(np.abs(period)),
        sample_rate=settings.sample_rate,
        hold=settings.hold,
        bias=settings.limits.bias,
        kind="multisine",
        period_samples=layout.period_samples,
        lines=layout.lines,
        steady_start=layout.steady_start,
        steady_stop=layout.steady_stop,
        seed=settings.seed,
        band=settings.band,
        settings={"grid": settings.grid, "phases": settings.phases, "power": settings.power, "margin": settings.margin},
    )
    return scaled_to_limits(
        unscaled, settings.limits, settings.rigs, margin=settings.margin, amplitude=settings.amplitude
    )


def _informative_lines(
    settings: MultisineSettings, layout: MultisineLayout, information: LineInformation
) -> Iterator[Complexes]:
    """Complex amplitudes (F,) in V to choose from, each as large as the limits let the periodic part be."""
    rng = np.random.default_rng([settings.seed, 0])
    signals = _limited_signals(settings, layout)
    for rounds in _ROUNDS:
        amplitudes = informative_amplitudes(information, costs=np.abs(signals) ** 2, rounds=rounds)
        if settings.phases == "low-peak":
            phases = schroeder_phases(amplitudes) + rng.normal(0.0, _DISTURBANCE, amplitudes.size)
            limits = PeakLimits(signals=signals, harmonics=layout.harmonics)
            yield lower_jointly(amplitudes * np.exp(1j * phases), limits=limits, information=information)
        else:
            lines = amplitudes * np.exp(1j * _choose_phases(settings, layout, amplitudes))
            yield lines / largest_peak(lines * signals, layout.harmonics, layout.period_samples)


def _given_amplitudes(settings: MultisineSettings, n_lines: int) -> Floats:
    if settings.line_amplitudes is None:
        return np.ones(n_lines)
    amplitudes = np.asarray(settings.line_amplitudes, dtype=np.float64)
    if amplitudes.shape != (n_lines,):
        raise ExcitationError(
            f"line_amplitudes: shape {amplitudes.shape}, but {n_lines} lines; ask lay_out_multisine for the lines first"
        )
    if not (np.isfinite(amplitudes).all() and (amplitudes >= 0).all() and amplitudes.any()):
        raise ExcitationError("line_amplitudes: every one must be a number from 0 up, at least one above 0")
    return amplitudes


def _choose_phases(settings: MultisineSettings, layout: MultisineLayout, amplitudes: Floats) -> Floats:
    if settings.phases == "schroeder":
        return schroeder_phases(amplitudes)
    phases = random_phases(layout.lines.size, rng=np.random.default_rng([settings.seed, 0]))
    if settings.phases == "random":
        return phases
    signals = amplitudes * _limited_signals(settings, layout)
    return lower_peak(phases, harmonics=layout.harmonics, signals=signals)


def _limited_signals(settings: MultisineSettings, layout: MultisineLayout) -> Complexes:
    """Voltage, its slope where it can bind and the angle of each rig, for 1 V, in units of their limits, (S, F)."""
    limits, lines = settings.limits, layout.lines
    held = hold_response(lines, step=1 / settings.sample_rate, hold=settings.hold)
    signals: list[Complexes] = [
        response_of(rig, lines) * held / (settings.margin * limits.angle) for rig in _rigs_weighed(settings)
    ]
    room = limits.voltage - abs(limits.bias)
    signals.append(np.full(lines.size, 1 / room, dtype=np.complex128))
    # a signal within ±V of frequencies up to f is nowhere steeper than 2 pi f V (S. Bernstein)
    if 2 * np.pi * lines[-1] * room > limits.slew_rate:
        signals.append(np.asarray(2j * np.pi * lines / limits.slew_rate, dtype=np.complex128))
    return np.array(signals)


def _rigs_weighed(settings: MultisineSettings) -> Sequence[RigModel]:
    return settings.rigs[:_RIGS_WEIGHED]


def _quietest_onset(period: Floats, layout: MultisineLayout, settings: MultisineSettings) -> int:
    """Sample of the period to begin with, so that onset and end swing the rigs least beyond the steady swing."""
    # on a coarser grid, which holds every line: the place is sought here, the swing is computed when it is scaled
    n_coarse = min(layout.period_samples, _ONSET_POINTS * int(layout.harmonics.max()))
    coarse = np.fft.irfft(np.fft.rfft(period)[: n_coarse // 2 + 1], n_coarse)
    part = n_coarse / layout.period_samples
    rests = round((layout.n_samples - layout.n_periods * layout.period_samples) * part) + 1
    ramp = max(2, round(layout.ramp_samples * part))
    start = round((layout.steady_start - layout.ramp_samples) * part) + ramp
    short = replace(
        layout, n_periods=1, n_samples=n_coarse + rests, period_samples=n_coarse, ramp_samples=ramp, steady_start=start
    )

    def swing(place: int) -> float:
        departure = _with_ramps(np.roll(coarse, -round(n_coarse * place / _ONSETS)), short)
        rate = settings.sample_rate * part
        profile = Profile(voltage=departure, sample_rate=rate, hold="smooth", bias=0.0, kind="multisine")
        return worst_swing(profile, _rigs_weighed(settings))

    # odd lines alone: half a period later only the sign is another
    tried = _ONSETS if settings.grid == "full" else _ONSETS // 2
    return layout.period_samples * min(range(tried), key=swing) // _ONSETS


def _with_ramps(period: Floats, layout: MultisineLayout) -> Floats:
    """Departure from the bias over the whole profile, (M,)."""
    ramp, steady = layout.ramp_samples, layout.n_periods * layout.period_samples
    driven = np.take(period, np.arange(-ramp, steady + ramp), mode="wrap")
    driven[:ramp] *= fade_in(ramp)
    driven[steady + ramp :] *= fade_in(ramp)[::-1]
    departure = np.zeros(layout.n_samples)
    start = layout.steady_start - ramp
    departure[start : start + driven.size] = driven
    return departure
