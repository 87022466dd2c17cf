"""Which voltage is the rig to be driven with?

The step test says which rig to expect; the design then uses the largest amplitude at which no limit is
passed anywhere in the step test's uncertainty box. Where the step test told too little to predict a swing,
the amplitude is a tenth of what the voltage limit leaves, and a caveat says so; where it told nothing at all, this
is a scouting test over all the sensor can see. A model estimated before can take the step test's place.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Literal

from excitation.errors import ExcitationError
from excitation.export import write_profile
from excitation.hdf5_file import file_sha256
from excitation.multisine import design_multisine
from excitation.multisine_layout import Grid, MultisineSettings
from excitation.profile import Profile
from excitation.step_sequence import StepSettings, design_step_sequence
from excitation.sweep_rate import Course, slowest_resonance, sweep_time
from excitation.swept_sine import SweptSineSettings, design_swept_sine
from freqid.records import RunKind
from freqid.rig import Rig, read_rig
from freqid.stages import Progress, silent
from freqid.stages.planned_rig import (
    SWING_MARGIN,
    expected_rig,
    is_unknown,
    limits_of,
    rig_from_model,
    rigs_of_the_box,
    with_prior_noted,
)
from freqid.stages.prediction import Prediction, predict, relative_damping_uncertainty, rig_to_plan_with
from freqid.test_folder import TestFolder

__all__ = ["Design", "ExciteSettings", "design_excitation", "designed_profile"]

_USUAL_DURATION, _LONGEST_USUAL, _LONGEST = 60.0, 600.0, 3600.0  # s
_TIME_CONSTANTS = 150  # of the ring-down in a usual test: enough for periods that resolve the resonance
_BAND_ABOUT_RESONANCE = (0.1, 4.0)  # of the natural frequency
_SCOUTING_SPAN, _SCOUTING_PERIODS = 300, 12  # highest over lowest frequency at most; periods of the lowest at least
_CAUTIOUS_PART = 0.1  # of the voltage room, where no swing can be predicted
_SWEEPING_PART = 0.83  # of the duration, at least: rests at both ends take the remainder
_LENGTHENINGS = 8
_SPARE = 1.05  # the duration asked of the next try, over what the last one suggests


@dataclass(frozen=True, slots=True, kw_only=True)
class ExciteSettings:
    """What the excitation is to be.

    `band` (Hz) lies about the expected natural frequency where None; a step test has none. `duration` (s) is
    chosen where None. `wanted_damping` is the half-width of the 95 % interval wanted for the damping ratio,
    relative: the test is made as long as that takes, but no longer than `duration` where that is given. `amplitude`
    (V from the bias) is refused where it would pass a limit; the largest safe one is taken where None. `from_model`
    plans from results/model.json in place of [step_test]. `grid` says which multiples of 1/period a multisine holds
    (those within the band that it leaves free show distortion), `course` how the frequency of a sweep runs; a sweep
    whose `duration` is None takes long enough to pass the resonance as slowly as `excitation.sweep_rate` says.
    """

    kind: Literal["multisine", "swept-sine", "step"] = "multisine"
    band: tuple[float, float] | None = field(default=None, metadata={"unit": "Hz"})
    duration: float | None = field(default=None, metadata={"unit": "s"})
    wanted_damping: float | None = None
    amplitude: float | None = field(default=None, metadata={"unit": "V"})
    seed: int = 1
    from_model: bool = False
    grid: Grid = "odd-gapped"
    course: Course = "exponential"

    @property
    def run_kind(self) -> RunKind:
        """The kind of run the profile is for."""
        return "step" if self.kind == "step" else "response"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Design:
    """The profile as it was written, what it predicts, the files (.h5, .csv, .wav, .json) and the card drawn of it."""

    profile: Profile
    prediction: Prediction
    rig: Rig  # as it was planned for
    files: tuple[Path, ...]
    card: Path | None = None


def design_excitation(
    folder: TestFolder, settings: ExciteSettings, *, draw: bool = True, progress: Progress = silent
) -> Design:
    """Design the profile and write it to profile.* (step_profile.* for a step test), replacing an earlier one.

    With `draw` the profile card goes to figures/profile_card.svg (step_profile_card.svg), too.

    Raises
    ------
    RigSheetError
        rig.toml is faulty.
    TestFolderError
        There is no model to plan from.
    excitation.ExcitationError
        The settings do not go together, or the uncertainty wanted cannot be reached (with what can).
    OSError
        The files cannot be written.
    """
    rig = read_rig(folder.rig)
    if settings.from_model:
        rig = rig_from_model(folder, rig)
    progress("designing the profile")
    profile = _long_enough(settings, rig)
    if settings.from_model:
        profile = with_prior_noted(profile, rig, read_rig(folder.rig))
    progress("predicting what it will do")
    prediction = predict(profile, rig)
    design = _written(folder, profile, prediction, settings, rig)
    if not draw:
        return design
    progress("drawing the profile")
    return replace(design, card=_drawn(folder, design, settings))


def designed_profile(settings: ExciteSettings, rig: Rig) -> Profile:
    """The profile that `design_excitation` would write for the rig of the sheet, written nowhere.

    Raises ExcitationError as `design_excitation` does.
    """
    return _long_enough(settings, rig)


def _long_enough(settings: ExciteSettings, rig: Rig) -> Profile:
    wanted = settings.wanted_damping
    if wanted is None:
        return _designed(settings, rig)
    rig_to_plan_with(rig)  # refuses before the work, not after
    longest = settings.duration or _LONGEST
    first = None if settings.duration is None else min(settings.duration, _usual(rig))
    profile = _designed(replace(settings, duration=first), rig)
    for _ in range(_LENGTHENINGS):
        reached = relative_damping_uncertainty(profile, rig)
        if reached <= wanted:
            return profile
        needed = profile.duration * (reached / wanted) ** 2  # information grows with the duration
        if needed > longest:
            raise ExcitationError(
                f"wanted damping: {wanted:g} relative (95 %) would take some {needed:.3g} s, {longest:g} s is the most"
                f" ({reached:.2g} is reached in {profile.duration:.4g} s); allow more, ask for less, or lower the noise"
            )
        profile = _designed(replace(settings, duration=min(longest, float(math.ceil(_SPARE * needed)))), rig)
    raise ExcitationError(
        f"wanted damping: {wanted:g} relative (95 %) is not reached in {profile.duration:.4g} s; ask for less"
    )


def _designed(settings: ExciteSettings, rig: Rig) -> Profile:
    """The profile at the largest amplitude allowed, or at the cautious one where no swing can be predicted."""
    design = {"multisine": _multisine, "swept-sine": _swept_sine, "step": _step}[settings.kind]
    profile = design(settings, rig, settings.amplitude)
    if expected_rig(rig) is not None or settings.amplitude is not None:
        return profile
    limits = limits_of(rig)
    cautious = _CAUTIOUS_PART * (limits.voltage - abs(limits.bias))
    return profile if profile.peak_voltage <= cautious else design(settings, rig, cautious)


def _multisine(settings: ExciteSettings, rig: Rig, amplitude: float | None) -> Profile:
    return design_multisine(
        MultisineSettings(
            band=_band(settings, rig),
            duration=settings.duration or _usual(rig),
            sample_rate=rig.output.sample_rate,
            limits=limits_of(rig),
            hold=rig.output.hold,
            power="informative",
            rigs=rigs_of_the_box(rig),
            margin=SWING_MARGIN,
            amplitude=amplitude,
            grid=settings.grid,
            seed=settings.seed,
        )
    )


def _swept_sine(settings: ExciteSettings, rig: Rig, amplitude: float | None) -> Profile:
    band = _band(settings, rig)
    return design_swept_sine(
        SweptSineSettings(
            band=band,
            duration=settings.duration or _unhurried(settings.course, band, rig),
            sample_rate=rig.output.sample_rate,
            limits=limits_of(rig),
            hold=rig.output.hold,
            rigs=rigs_of_the_box(rig),
            margin=SWING_MARGIN,
            amplitude=amplitude,
            course=settings.course,
        )
    )


def _step(settings: ExciteSettings, rig: Rig, amplitude: float | None) -> Profile:
    return design_step_sequence(
        StepSettings(
            sample_rate=rig.output.sample_rate,
            limits=limits_of(rig),
            duration=settings.duration,
            hold=rig.output.hold,
            rigs=rigs_of_the_box(rig),
            margin=SWING_MARGIN,
            amplitude=amplitude,
        )
    )


def _band(settings: ExciteSettings, rig: Rig) -> tuple[float, float]:
    if settings.band is not None:
        return settings.band
    resonance = rig.step_test.natural_frequency
    if is_unknown(rig):
        return _scouting_band(rig, settings.duration or _USUAL_DURATION)
    if resonance is None:
        raise ExcitationError("band: [step_test] has no natural_frequency to lay it about; give --band LOW HIGH")
    low, high = (part * resonance for part in _BAND_ABOUT_RESONANCE)
    seen = max(1.5 * resonance, 0.45 * rig.angle_sensor.sample_rate)  # by the sensor, but the resonance always
    return _short(low), _short(min(high, 0.4 * rig.output.sample_rate, seen))


def _scouting_band(rig: Rig, duration: float) -> tuple[float, float]:
    """All that the sensor can see and the duration can resolve, Hz."""
    high = min(0.45 * rig.angle_sensor.sample_rate, 0.4 * rig.output.sample_rate)
    return _short(min(max(high / _SCOUTING_SPAN, _SCOUTING_PERIODS / duration), high / 2)), _short(high)


def _short(frequency: float) -> float:
    return float(f"{frequency:.3g}")


def _usual(rig: Rig) -> float:
    """A usual duration in s: a minute, or more for a slowly decaying or slow rig."""
    model = expected_rig(rig)
    if model is None:
        return _USUAL_DURATION
    return min(_LONGEST_USUAL, max(_USUAL_DURATION, math.ceil(_TIME_CONSTANTS * model.slowest_decay)))


def _unhurried(course: Course, band: tuple[float, float], rig: Rig) -> float:
    """A usual duration in s of a sweep, or a longer one where the resonance asks for it."""
    resonance = slowest_resonance(rigs_of_the_box(rig), band=band)
    if resonance is None:
        return _usual(rig)
    needed = sweep_time(resonance, band=band, course=course) / _SWEEPING_PART
    return max(_usual(rig), min(_LONGEST_USUAL, float(math.ceil(needed))))


def _written(
    folder: TestFolder, profile: Profile, prediction: Prediction, settings: ExciteSettings, rig: Rig
) -> Design:
    sources = (folder.rig, folder.model) if settings.from_model else (folder.rig,)
    files = write_profile(
        profile,
        folder.path,
        full_scale=rig.output.full_scale,
        name=folder.profile_stem(settings.run_kind),
        prediction=prediction.as_json(),
        sources={folder.relative_name(file): file_sha256(file) for file in sources},
    )
    written = (files.hdf5, files.csv, files.wav, files.json)
    return Design(profile=files.profile, prediction=prediction, rig=rig, files=written)


def _drawn(folder: TestFolder, design: Design, settings: ExciteSettings) -> Path:
    """The profile card, drawn into figures/."""
    from freqid.report.figure_style import save_figure
    from freqid.report.profile_card import profile_card_figure

    rig = design.rig
    figure = profile_card_figure(design.profile, rigs_of_the_box(rig), limits_of(rig), angle_unit=rig.angle_unit)
    folder.figures.mkdir(exist_ok=True)
    path = folder.figures / f"{folder.profile_stem(settings.run_kind)}_card.svg"
    save_figure(figure, path)
    return path
