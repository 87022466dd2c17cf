"""What does the rig sheet tell the design of an excitation: which rig to expect, and within which limits?

The step test gives a most probable rig and, with its uncertainties (relative, at 95 %), a box of rigs
around it. A swing is safe only if it is safe all over the box: at the highest gain (the swing is
proportional to it), at either end of the damping ratio, and at natural frequencies all across, so close
that none of the box lies further than a quarter of a half-power width (2 zeta fn) from one that is looked
at: a rig that is lightly damped answers quite differently between the corners. The delay moves the swing in
time and leaves it as large.

A model estimated before takes the place of the step test where the next test is planned from it; the profile then
carries these values, so that later checks look at the rigs it was designed for.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, replace
from typing import Any

from excitation.errors import ExcitationError
from excitation.limits import Limits
from excitation.profile import Profile
from excitation.swing import check_swing
from freqid.errors import TestFolderError
from freqid.rig import Rig, StepTest
from freqid.second_order import SecondOrder
from freqid.test_folder import TestFolder

__all__ = [
    "SWING_MARGIN",
    "check_against_limits",
    "expected_rig",
    "is_unknown",
    "limits_of",
    "rig_from_model",
    "rigs_of_the_box",
    "with_prior_noted",
]

SWING_MARGIN = 0.9  # of the way to the stops, at the worst rig of the box
_PRIOR, _SHEET = "prior", "step_test_at_design"  # among the settings of a profile planned from a model
_PART_OF_WIDTH = 0.25
_MOST_EACH_SIDE = 100  # natural frequencies: enough for damping ratios down to a hundredth of their uncertainty


def limits_of(rig: Rig) -> Limits:
    """The limits of the rig; the voltage is also held to what the output can give."""
    return Limits(
        voltage=min(rig.limits.voltage, rig.output.full_scale),
        slew_rate=rig.limits.slew_rate,
        angle=rig.limits.angle,
        bias=rig.limits.bias,
    )


def expected_rig(rig: Rig) -> SecondOrder | None:
    """The rig that [step_test] describes; None where gain, natural frequency or damping ratio is not known."""
    known = rig.step_test
    if known.gain is None or known.natural_frequency is None or known.damping_ratio is None:
        return None
    return SecondOrder(
        gain=known.gain,
        natural_frequency=known.natural_frequency,
        damping_ratio=known.damping_ratio,
        delay=known.delay or 0.0,
    )


def is_unknown(rig: Rig) -> bool:
    """Whether [step_test] tells nothing of gain, natural frequency and damping ratio."""
    known = rig.step_test
    return known.gain is None and known.natural_frequency is None and known.damping_ratio is None


def rig_from_model(folder: TestFolder, rig: Rig) -> Rig:
    """The rig with results/model.json for its step test: the parameters, and their intervals as relative uncertainties.

    The interval of a model knows the noise of its run, not that the rig may change with amplitude or temperature: no
    uncertainty is taken as smaller than the sheet's tolerance for that quantity, nor, where the model does not
    describe the response, as smaller than that of [step_test]. A delay that includes the offset of two clocks says
    nothing of the rig's own: then the sheet's stays.

    Raises
    ------
    TestFolderError
        There is no model, it is damaged or in another angle unit, or a parameter is undetermined or too uncertain.
    """
    content = folder.read_json(folder.model, format="freqid model")
    if content.get("angle_unit") != rig.angle_unit:
        raise TestFolderError(
            f"{folder.model}: angle_unit {content.get('angle_unit')!r}, but {rig.angle_unit!r} in rig.toml; run"
            f" `freqid estimate {folder.quoted}` again"
        )
    try:
        gain, gain_uncertainty = _from_model(folder, content, "gain")
        frequency, frequency_uncertainty = _from_model(folder, content, "natural_frequency")
        damping, damping_uncertainty = _from_model(folder, content, "damping_ratio")
        least = _least_uncertainty(rig, adequate=content.get("adequate") is True)
        delay = content["parameters"]["delay"]
        own = delay is not None and not delay.get("includes_clock_offset", True)
        prior = StepTest(
            gain=gain,
            natural_frequency=frequency,
            damping_ratio=damping,
            delay=float(delay["value"]) if own else rig.step_test.delay,
            gain_uncertainty=max(gain_uncertainty, least["gain"]),
            natural_frequency_uncertainty=max(frequency_uncertainty, least["natural_frequency"]),
            damping_ratio_uncertainty=max(damping_uncertainty, least["damping_ratio"]),
        )
        expected_rig(replace(rig, step_test=prior))  # refuses a natural frequency or damping ratio that cannot be
    except (KeyError, TypeError, ValueError) as error:
        raise TestFolderError(
            f"{folder.model}: damaged ({error!r}); run `freqid estimate {folder.quoted}` again"
        ) from None
    return replace(rig, step_test=prior)


def _least_uncertainty(rig: Rig, *, adequate: bool) -> dict[str, float]:
    """Smallest relative uncertainties (95 %) that a plan may rest on."""
    names = ("gain", "natural_frequency", "damping_ratio")
    tolerated = {name: getattr(rig.tolerance, name) for name in names}
    if adequate:
        return tolerated
    return {name: max(tolerated[name], getattr(rig.step_test, f"{name}_uncertainty")) for name in names}


def with_prior_noted(profile: Profile, planned: Rig, sheet: Rig) -> Profile:
    """The profile with what it was planned for, in place of the sheet's [step_test], and that, among its settings."""
    noted = {_PRIOR: asdict(planned.step_test), _SHEET: asdict(sheet.step_test)}
    return replace(profile, settings={**profile.settings, **noted})


def rigs_of_the_box(rig: Rig) -> tuple[SecondOrder, ...]:
    """The expected rig, then the largest-gain rigs all over its box (corners first); empty without an expected rig.

    Raises
    ------
    ExcitationError
        The damping ratio is too small for the uncertainty of the natural frequency to look at all that lies between.
    """
    expected = expected_rig(rig)
    if expected is None:
        return ()
    known = rig.step_test
    largest_gain = expected.gain * (1 + known.gain_uncertainty)
    corners, between = [], []
    for damping in _ends(expected.damping_ratio, known.damping_ratio_uncertainty):
        frequencies = _across(expected.natural_frequency, known.natural_frequency_uncertainty, damping)
        rigs = [
            SecondOrder(gain=largest_gain, natural_frequency=frequency, damping_ratio=damping)
            for frequency in frequencies  # without delay: faster, and the swing is the same
        ]
        corners += [rigs[0], rigs[-1]]
        between += rigs[1:-1]
    return (expected, *dict.fromkeys((*corners, *between)))  # one of each, where an uncertainty is 0


def check_against_limits(profile: Profile, rig: Rig) -> float | None:
    """Worst predicted swing of the profile within the limits of the sheet as it is now; None without a rig to expect.

    A profile that was planned from a model is held against the rigs of that model, and, where [step_test] has changed
    since, against those of the sheet as it is now, too: the more cautious of both decides.

    Raises
    ------
    excitation.LimitExceeded
        Voltage, slew rate or predicted swing passes its limit; the message holds the figures.
    """
    limits = limits_of(rig)
    limits.check_profile(profile)
    rigs = [model for planned in _planned_for(profile, rig) for model in rigs_of_the_box(planned)]
    return check_swing(profile, rigs, limits, margin=SWING_MARGIN) if rigs else None


def _planned_for(profile: Profile, rig: Rig) -> list[Rig]:
    """The sheets whose rigs must stay clear of the stops."""
    prior: Any = profile.settings.get(_PRIOR)
    if prior is None:
        return [rig]
    planned = replace(rig, step_test=StepTest(**prior))
    return [planned] if profile.settings.get(_SHEET) == asdict(rig.step_test) else [planned, rig]


def _from_model(folder: TestFolder, content: Mapping[str, Any], name: str) -> tuple[float, float]:
    """Value of a parameter and half its 95 % interval, relative."""
    entry = content["parameters"][name]
    if entry is None:
        raise TestFolderError(
            f"{folder.model}: {name} is undetermined, so no test can be planned from it; plan from [step_test], without"
            " --from-model"
        )
    value, (low, high) = float(entry["value"]), entry["interval_95"]
    relative = (high - low) / 2 / abs(value)
    if not relative < 1:
        raise TestFolderError(
            f"{folder.model}: {name} is known to {relative:.3g} relative (95 %) only, below 1 is needed here;"
            " plan from [step_test], without --from-model"
        )
    return value, relative


def _across(natural_frequency: float, relative: float, damping_ratio: float) -> list[float]:
    """Natural frequencies over the box in Hz, ascending: both ends, the middle, as many more as the width needs."""
    spacing = 2 * _PART_OF_WIDTH * 2 * damping_ratio  # relative; a rig halfway is the part of a width from either
    n_each_side = max(1, math.ceil(relative / spacing))
    if n_each_side > _MOST_EACH_SIDE:
        raise ExcitationError(
            f"swing: cannot be predicted for a damping ratio of {damping_ratio:.3g} while the natural frequency is"
            f" known to {relative:.3g} only; find it more closely and lower [step_test]"
            f" natural_frequency_uncertainty to {0.9 * _MOST_EACH_SIDE * spacing:.2g}"
        )
    return [natural_frequency * (1 + relative * n / n_each_side) for n in range(-n_each_side, n_each_side + 1)]


def _ends(value: float, relative: float) -> tuple[float, float]:
    return value * (1 - relative), value * (1 + relative)
