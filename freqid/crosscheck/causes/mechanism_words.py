"""What is a mechanism called, what does its number say, and which test would settle it?

`code` is the stable word in results/crosscheck.json. Words are those of test engineers; every sentence holds the
figure it rests on.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from freqid.crosscheck.causes.mechanism_trials import Trial, Trials
from freqid.quantity import Quantity

__all__ = ["MechanismWords", "words_for"]


@dataclass(frozen=True, slots=True, kw_only=True)
class MechanismWords:
    """Code, the finding in words with its figure, why it need not be true (empty if nothing stands against it in
    principle), and the test that settles it.
    """

    code: str
    finding: str
    doubt: str = ""
    settling_test: str = ""


def words_for(trial: Trial, trials: Trials, *, angle_unit: str, folder: str) -> MechanismWords:
    """The words for one fitted mechanism."""
    return _WORDS[trial.mechanism.code](_Figures(trial, trials, angle_unit, folder))


@dataclass(frozen=True, slots=True)
class _Figures:
    trial: Trial
    trials: Trials
    angle_unit: str
    folder: str

    def number(self, i: int = 0, factor: float = 1.0, unit: str | None = None) -> str:
        """One of the mechanism's numbers with its expanded uncertainty."""
        fit = self.trial.fit
        value, deviation = factor * float(fit.numbers[i]), abs(factor) * float(fit.uncertainty[i])
        return str(Quantity.normal(value, self.angle_unit if unit is None else unit, deviation))

    def roughly(self) -> str:
        """A number whose fit has corners: its interval holds what noise does, not how coarse the mechanism is."""
        return f"about {self.value():.2g} {self.angle_unit} ({self.number()} by the fit, noise alone)"

    def change(self, i: int = 0) -> str:
        """A number that is a natural logarithm, as a relative change."""
        fit = self.trial.fit
        factor = math.exp(float(fit.numbers[i]))
        return str(Quantity.normal(100 * (factor - 1), "%", 100 * factor * float(fit.uncertainty[i])))

    def value(self, i: int = 0) -> float:
        return float(self.trial.fit.numbers[i])

    @property
    def period(self) -> float:
        return 1 / self.trial.fit.parameters[0].model.natural_frequency

    @property
    def swing(self) -> float:
        """Largest swing from rest in the records."""
        pairs = zip(self.trials.tests, self.trial.fit.parameters, strict=True)
        return max(float(abs(test.record.angle - p.rest_angle).max()) for test, p in pairs)


def _dry_friction(f: _Figures) -> MechanismWords:
    return MechanismWords(
        code="dry_friction",
        finding=f"Dry friction that holds the rig up to {f.roughly()} from where the spring would put it",
        settling_test="Repeat the step test at half the amplitude: dry friction damps the smaller swing more, and "
        "the settled angle stays off by up to that much on the side it came from.",
    )


def _backlash(f: _Figures) -> MechanismWords:
    return MechanismWords(
        code="backlash",
        finding=f"Play of {f.number()} between shaft and sensor",
        settling_test="Approach the same voltage slowly from above and from below: the settled angles differ by the "
        "whole play.",
    )


def _spring(f: _Figures) -> MechanismWords:
    hardens = f.value() > 0
    return MechanismWords(
        code="hardening_spring" if hardens else "softening_spring",
        finding=f"A spring that {'hardens' if hardens else 'softens'}: its stiffness changes by "
        f"{f.number(0, 100, '%')} up to a swing of {f.swing:.3g} {f.angle_unit}",
        settling_test=f"Repeat the frequency test at a third of the amplitude: the natural frequency then "
        f"{'falls' if hardens else 'rises'} towards that of small swings.",
    )


def _unequal_spring(f: _Figures) -> MechanismWords:
    return MechanismWords(
        code="unequal_directions",
        finding=f"A spring unequal in both directions: its stiffness differs by {f.number(0, 100, '%')} between rest "
        f"and {f.swing:.3g} {f.angle_unit}, the other way on the other side",
        settling_test="Make the step test about another rest voltage: gain and natural frequency move with it.",
    )


def _unequal_gain(f: _Figures) -> MechanismWords:
    return MechanismWords(
        code="unequal_directions",
        finding=f"Unequal gain: {f.number(0, 100, '%')} more upward than downward",
        settling_test="Step up and down from rest by the same voltage and compare the settled angles.",
    )


def _end_stop(f: _Figures) -> MechanismWords:
    return MechanismWords(
        code="end_stop",
        finding=f"An end stop hit at {f.roughly()} from rest",
        settling_test="Repeat the test at half the amplitude, clear of the stop.",
    )


def _saturation(f: _Figures) -> MechanismWords:
    return MechanismWords(
        code="saturation",
        finding=f"A voltage clipped at {f.number(unit='V')} from rest",
        settling_test=f"Repeat the tests below {0.8 * f.value():.2g} V, or measure the voltage at the rig.",
    )


def _ramp(f: _Figures) -> MechanismWords:
    return MechanismWords(
        code="step_was_a_ramp",
        finding=f"A step that was a ramp of {f.number(unit='s')} (half a volt range), where a sudden one was commanded",
        settling_test="Measure the voltage at the rig during a step and import it as the input.",
    )


def _extra_pole(f: _Figures) -> MechanismWords:
    corner = 1 / (2 * math.pi * f.value())
    return MechanismWords(
        code="extra_pole",
        finding=f"A further first-order lag of {f.number(unit='s')} (corner at {corner:.3g} Hz)",
        doubt="The lag of a driver and that of a filter in the sensor act alike in both tests and cannot be told apart "
        "by them.",
        settling_test="Record the voltage at the rig's terminals beside the angle: a driver's lag shows in it, a "
        "sensor's does not.",
    )


def _exposure(f: _Figures) -> MechanismWords:
    return MechanismWords(
        code="uncorrected_exposure",
        finding=f"Averaging over {f.number(unit='s')} more than the exposure stated",
        doubt="An averaging anywhere between voltage and reading looks alike: exposure, hold of the output or filter.",
        settling_test="Look the exposure (and any averaging in the sensor) up, correct [angle_sensor] exposure and "
        "estimate again.",
    )


def _second_mode(f: _Figures) -> MechanismWords:
    frequency, deviation = math.exp(f.value(1)), float(f.trial.fit.uncertainty[1])
    return MechanismWords(
        code="second_mode",
        finding=f"A second mode at {frequency:.3g} ± {1.96 * frequency * deviation:.1g} Hz with "
        f"{f.number(0, 100, '%')} of the static gain",
        settling_test=f"Run a frequency test with lines close about {frequency:.3g} Hz: `freqid excite {f.folder} "
        f"--kind multisine --band {0.7 * frequency:.3g} {1.4 * frequency:.3g}`.",
    )


def _scale(f: _Figures) -> MechanismWords:
    return MechanismWords(
        code="scale_error",
        finding=f"The step test's angle per volt differs by {f.change()}, the same at all frequencies: the "
        f"scale of sensor or output differs between the tests",
        doubt="Whether the voltage or the angle is scaled otherwise cannot be told from the two tests.",
        settling_test="Hold the rig at a known angle and at a known voltage, and read both scales.",
    )


def _time_scale(f: _Figures) -> MechanismWords:
    return MechanismWords(
        code="time_scale",
        finding=f"The step test's natural frequency and all its times differ by {f.change()} at equal gain and damping "
        f"ratio: a clock or a sample rate is stated wrongly in one test",
        doubt=_clock_doubt(f),
        settling_test="Record a signal of known frequency with both logs, or both tests on one clock.",
    )


def _clock_doubt(f: _Figures) -> str:
    if any(t.record.common_clock for t in f.trials.tests) or len(f.trials.tests) != 2:
        return "On one clock a stiffer spring (temperature, amplitude) would look the same."
    ratios = {t.kind: p.clock_ratio for t, p in zip(f.trials.tests, f.trial.fit.parameters, strict=True)}
    shown = math.log(ratios["response"] / ratios["step"])
    deviation = float(f.trial.fit.uncertainty[0])
    if abs(shown - f.value()) < 4 * deviation + 1e-4:
        return ""
    return (
        f"The sensor's clock against the voltage's changed by {100 * shown:+.2g} % only, so the voltage's clock is not "
        "to blame; a sensor clock off by as much in the same test, or a stiffer spring, would do it."
    )


def _damping(f: _Figures) -> MechanismWords:
    return MechanismWords(
        code="damping_differs",
        finding=f"The step test's damping ratio differs by {f.change()} at equal gain and natural frequency: the rig's "
        f"damping itself changed between the tests",
        doubt="No mechanism in the records explains it better; air, temperature or load may.",
        settling_test=f"Repeat the frequency test now: `freqid excite {f.folder} --kind multisine --seed 2`.",
    )


def _operating_point(f: _Figures) -> MechanismWords:
    parts = " and ".join(f"{t.words} {_levels(t.record.drive)}" for t in f.trials.tests)
    changes = ", ".join(
        f"{name} by {f.change(i)}" for i, name in enumerate(("gain", "natural frequency", "damping ratio"))
    )
    return MechanismWords(
        code="operating_point",
        finding=f"Each test alone is that of a linear rig, but not of the same: {changes} (step against "
        f"frequency test); the tests were made at different operating points or amplitudes ({parts})",
        settling_test=f"Repeat the frequency test at the operating point and amplitude of the step test: set [limits] "
        f"bias, then `freqid excite {f.folder} --kind multisine`.",
    )


def _levels(drive: object) -> str:
    value = drive.value + drive.rest  # type: ignore[attr-defined]
    return f"{value.min():.3g} to {value.max():.3g} V, mean {value.mean():.3g} V"


def _drift(f: _Figures) -> MechanismWords:
    parts = ", ".join(f"{f.number(i)} over the {t.words}" for i, t in enumerate(f.trials.tests))
    return MechanismWords(
        code="drift",
        finding=f"The rest angle drifts: {parts}",
        settling_test="Let the rig stand at rest for the length of a test and log the angle.",
    )


_WORDS: dict[str, Callable[[_Figures], MechanismWords]] = {
    "dry_friction": _dry_friction,
    "backlash": _backlash,
    "spring": _spring,
    "unequal_spring": _unequal_spring,
    "unequal_gain": _unequal_gain,
    "end_stop": _end_stop,
    "saturation": _saturation,
    "step_was_a_ramp": _ramp,
    "extra_pole": _extra_pole,
    "hidden_exposure": _exposure,
    "second_mode": _second_mode,
    "scale_error": _scale,
    "time_scale": _time_scale,
    "damping_differs": _damping,
    "operating_point": _operating_point,
    "drift": _drift,
}
