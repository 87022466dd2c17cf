"""Which lines does a multisine hold, and how often does its period fit?

The lines are multiples of 1/period within the band: the odd ones with one of every four left out at random
("odd-gapped": the even multiples then show even distortion, those left out odd distortion, see
`Profile.detection_lines`), all odd ones ("odd"), or all ("full": no distortion is seen). A drive of odd lines only is
the same half a period later with the sign turned: only its onset and its end tell a reversed sensor from such a shift.
With a rig, the period is chosen so that the resonance is resolved.

Source: R. Pintelon, J. Schoukens, System Identification: A Frequency Domain Approach (2nd ed., 2012),
chapters 2 and 4.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray

from excitation.errors import ExcitationError
from excitation.limits import Limits
from excitation.profile import Floats, Hold
from excitation.rig_model import RigModel, find_resonance
from excitation.timing import check_timing, lead_in_samples, ring_down_time

__all__ = ["Grid", "MultisineLayout", "MultisineSettings", "Phases", "Power", "lay_out_multisine"]

Grid = Literal["odd-gapped", "odd", "full"]
Phases = Literal["low-peak", "random", "schroeder"]
Power = Literal["flat", "informative"]

_PERIOD_UNIT = 1e-3  # s; a period chosen here is a whole number of them
_RAMP = 0.25  # of a period, each way, at most
_RAMP_WIDTHS = 1.0  # over the half-power width of the resonance: about 3 of its time constants, at most
_MOST_PERIODS, _FEWEST_PERIODS, _PERIODS_WITHOUT_RIG = 6, 3, 4
_LONGEST_PERIOD = 2  # times the one that resolves the resonance: a longer one only holds more lines, and more work
_LINES_PER_WIDTH = 4.0  # lines within the half-power width of the resonance, where the duration allows
_FEWEST_LINES = 3
_GAP_GROUP = 4  # one of so many odd lines is left out


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MultisineSettings:
    """What the multisine is to be.

    Attributes
    ----------
    band : (low, high)
        Hz; the lines lie within, edges included. high must stay below half the sample rate.
    duration : float
        s, in all, rests and ramps included.
    sample_rate : float
        Hz.
    limits : Limits
        Of the rig; the bias is among them.
    hold : "zero-order" or "smooth"
        What the output does between the samples.
    grid : "odd-gapped", "odd" or "full"
        Which multiples of 1/period are excited; those within the band that are not show distortion.
    phases : "low-peak", "random" or "schroeder"
        "low-peak" starts from random phases and lowers the peak of whatever limits the amplitude.
    power : "flat" or "informative"
        "informative" gives the lines the power that tells most of damping ratio and natural frequency;
        flat without rigs.
    rigs : sequence of RigModel
        All that the true rig may be, the likeliest first; without any the swing is not limited.
    margin : float
        The part of the way to the stops that may be used.
    amplitude : float or None
        Peak departure from the bias in V; None for the largest allowed.
    period : float or None
        s; None to choose it from the duration and the width of the resonance.
    line_amplitudes : (F,) array or None
        Relative amplitude of each line of `lay_out_multisine`; None for what `power` says.
    seed : int
        Of the random phases and gaps.
    """

    band: tuple[float, float] = field(metadata={"unit": "Hz"})
    duration: float = field(metadata={"unit": "s"})
    sample_rate: float = field(metadata={"unit": "Hz"})
    limits: Limits
    hold: Hold = "zero-order"
    grid: Grid = "odd-gapped"
    phases: Phases = "low-peak"
    power: Power = "flat"
    rigs: Sequence[RigModel] = ()
    margin: float = 0.9
    amplitude: float | None = field(default=None, metadata={"unit": "V"})
    period: float | None = field(default=None, metadata={"unit": "s"})
    line_amplitudes: Floats | None = None
    seed: int = 1


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MultisineLayout:
    """Where in time and frequency the multisine lies; counts in samples."""

    n_samples: int
    period_samples: int
    n_periods: int
    ramp_samples: int
    steady_start: int
    harmonics: NDArray[np.int64]  # (F,), multiples of 1/period
    lines: Floats = field(metadata={"unit": "Hz"})  # (F,)

    @property
    def steady_stop(self) -> int:
        """First sample after the periodic part."""
        return self.steady_start + self.n_periods * self.period_samples


def lay_out_multisine(settings: MultisineSettings) -> MultisineLayout:
    """Choose period, number of periods and lines.

    With a rig, as many periods (3 to 6, more in a long test) as leave 4 excited lines within the half-power width of
    its resonance; without one, 4.

    Raises
    ------
    ExcitationError
        Band, rate, duration or period do not go together; says what would.
    """
    _check_choices(settings)
    check_timing(settings.band, duration=settings.duration, sample_rate=settings.sample_rate)
    rate = settings.sample_rate
    n_samples = round(settings.duration * rate)
    lead = lead_in_samples(n_samples, rate)
    rest = round(ring_down_time(settings.rigs, band=settings.band, duration=settings.duration) * rate)
    period, n_periods = _choose_period(settings, available=n_samples - lead - rest)
    harmonics = _choose_harmonics(settings, period)
    ramp = _ramp(settings, period)
    return MultisineLayout(
        n_samples=n_samples,
        period_samples=period,
        n_periods=n_periods,
        ramp_samples=ramp,
        steady_start=lead + ramp,
        harmonics=harmonics,
        lines=np.asarray(harmonics * (rate / period)),
    )


def _check_choices(settings: MultisineSettings) -> None:
    for name, value, allowed in (
        ("grid", settings.grid, get_args(Grid)),
        ("phases", settings.phases, get_args(Phases)),
        ("power", settings.power, get_args(Power)),
    ):
        if value not in allowed:
            raise ExcitationError(f"{name}: {value!r} is none of {', '.join(allowed)}")


def _choose_period(settings: MultisineSettings, *, available: int) -> tuple[int, int]:
    """Period in samples and how many of them."""
    ramps = 2 * _RAMP
    if settings.period is not None:
        period = round(settings.period * settings.sample_rate)
        n_periods = (available - 2 * _ramp(settings, period)) // max(period, 1)
        if period < 2 or n_periods < 2:
            most = available / (2 + ramps) / settings.sample_rate
            raise ExcitationError(
                f"period: {settings.period:g} s leaves fewer than 2 periods beside rests and ramps; "
                f"choose at most {most:.4g} s or a longer duration"
            )
        return period, n_periods
    n_periods = _PERIODS_WITHOUT_RIG
    wanted = _wanted_period(settings)
    if wanted is not None:
        fitting = math.floor(available / (wanted * settings.sample_rate) - ramps)
        most = max(_MOST_PERIODS, fitting // _LONGEST_PERIOD)
        n_periods = min(most, max(_FEWEST_PERIODS, fitting))
    quarters = math.floor(available / (n_periods + ramps))
    period = max(quarters, math.floor((available - 2 * _longest_ramp(settings)) / n_periods))
    unit = max(round(settings.sample_rate * _PERIOD_UNIT), 1)  # means over whole milliseconds then divide the period
    return max(period // unit * unit, 2), n_periods


def _ramp(settings: MultisineSettings, period: int) -> int:
    """Samples of each ramp."""
    return min(round(_RAMP * period), _longest_ramp(settings))


def _longest_ramp(settings: MultisineSettings) -> int:
    """Samples of the longest ramp worth its time: until the resonance has followed, any where none is known."""
    low, high = settings.band
    resonance = find_resonance(settings.rigs[0], band=(low / 4, high * 4)) if settings.rigs else None
    if resonance is None:
        return round(settings.duration * settings.sample_rate)
    return max(2, round(_RAMP_WIDTHS / resonance.half_power_width * settings.sample_rate))


def _wanted_period(settings: MultisineSettings) -> float | None:
    """Period in s that puts enough excited lines into the resonance of the likeliest rig."""
    low, high = settings.band
    resonance = find_resonance(settings.rigs[0], band=(low / 4, high * 4)) if settings.rigs else None
    if resonance is None:
        return None
    step = 1 if settings.grid == "full" else 2
    return step * _LINES_PER_WIDTH / resonance.half_power_width


def _choose_harmonics(settings: MultisineSettings, period: int) -> NDArray[np.int64]:
    low, high = (edge * period / settings.sample_rate for edge in settings.band)
    first, last = max(1, math.ceil(low - 1e-9)), math.floor(high + 1e-9)
    harmonics = np.arange(first, last + 1, dtype=np.int64)
    if settings.grid != "full":
        harmonics = harmonics[harmonics % 2 == 1]
    if harmonics.size < _FEWEST_LINES:
        spacing = settings.sample_rate / period * (1 if settings.grid == "full" else 2)
        raise ExcitationError(
            f"band: {settings.band[0]:g} to {settings.band[1]:g} Hz holds {harmonics.size} lines at a spacing of "
            f"{spacing:.3g} Hz, at least {_FEWEST_LINES} are needed; widen the band or lengthen the test"
        )
    return _with_gaps(harmonics, settings.seed) if settings.grid == "odd-gapped" else harmonics


def _with_gaps(harmonics: NDArray[np.int64], seed: int) -> NDArray[np.int64]:
    """Leave one line of each whole group out, at random: neither the first nor the last of all, nor two neighbours."""
    rng = np.random.default_rng([seed, 1])
    left_out: list[int] = []
    for start in range(0, harmonics.size - _GAP_GROUP + 1, _GAP_GROUP):
        inner = range(max(start, 1), min(start + _GAP_GROUP, harmonics.size - 1))
        left_out.append(int(rng.choice([place for place in inner if place - 1 not in left_out])))
    return np.delete(harmonics, left_out)
