"""What will a profile do to the rig, and how well will it measure it?

The rig to expect and its uncertainty box come from the step test (`freqid.stages.planned_rig`); the
uncertainties are the bounds of `excitation.information` for the angle sensor of the rig sheet, its clock
taken as unknown, so that the delay is that of rig and clocks together.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from excitation.errors import ExcitationError
from excitation.information import SensorSettings, predicted_uncertainties
from excitation.profile import Profile
from excitation.sweep_rate import distortion_at_rate, slowest_resonance, sweep_time
from freqid.quantity import Caveat, Quantity, in_unit
from freqid.rig import Rig
from freqid.second_order import PARAMETER_ORDER, SecondOrder, parameter_units
from freqid.stages.planned_rig import (
    SWING_MARGIN,
    check_against_limits,
    expected_rig,
    is_unknown,
    rigs_of_the_box,
)

__all__ = ["Prediction", "predict", "relative_damping_uncertainty", "rig_to_plan_with"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Prediction:
    """What a profile will do and tell.

    `swing` is the largest in the step test's uncertainty box, transients included (None: cannot be told).
    `expected` holds gain, natural frequency, damping ratio and delay of the step test with the uncertainty
    that the profile can reach (None: cannot be told, and a caveat says why).
    """

    swing: float | None = in_unit("angle_unit")
    allowed_swing: float = in_unit("angle_unit")
    stops: float = in_unit("angle_unit")
    angle_unit: str
    expected: Mapping[str, Quantity | None]
    caveats: tuple[Caveat, ...]

    def as_json(self) -> dict[str, Any]:
        """The form of "prediction" in profile.json."""
        return {
            "swing": self.swing,
            "allowed_swing": self.allowed_swing,
            "stops": self.stops,
            "angle_unit": self.angle_unit,
            "expected": {name: value.as_json() if value else None for name, value in self.expected.items()},
            "warnings": [caveat.as_json() for caveat in self.caveats],
        }


def predict(profile: Profile, rig: Rig) -> Prediction:
    """What the profile will do to the rig of the sheet and tell of it.

    Raises
    ------
    excitation.LimitExceeded
        The profile passes a limit of the sheet.
    """
    swing = check_against_limits(profile, rig)
    expected, caveats = _expected(profile, rig)
    return Prediction(
        swing=swing,
        allowed_swing=SWING_MARGIN * rig.limits.angle,
        stops=rig.limits.angle,
        angle_unit=rig.angle_unit,
        expected=expected,
        caveats=(*caveats, *_band_caveats(profile, rig), *_sweep_caveats(profile, rig)),
    )


def relative_damping_uncertainty(profile: Profile, rig: Rig) -> float:
    """Half-width of the 95 % interval of the damping ratio that the profile can reach, relative.

    Raises
    ------
    ExcitationError
        It cannot be told: rig or noise unknown, or the profile does not determine the four parameters.
    """
    reached = _quantities(profile, rig_to_plan_with(rig), rig)["damping_ratio"]
    return reached.expanded_uncertainty / reached.value


def rig_to_plan_with(rig: Rig) -> SecondOrder:
    """The expected rig; raises ExcitationError where the sheet tells too little to predict an uncertainty."""
    model = expected_rig(rig)
    if model is None or rig.angle_sensor.noise == 0:
        raise ExcitationError(
            "wanted damping: cannot be planned for; give gain, natural_frequency and damping_ratio in [step_test]"
            " and a noise above 0 in [angle_sensor]"
        )
    return model


def _expected(profile: Profile, rig: Rig) -> tuple[dict[str, Quantity | None], list[Caveat]]:
    nothing: dict[str, Quantity | None] = dict.fromkeys(PARAMETER_ORDER)
    model = expected_rig(rig)
    if is_unknown(rig):
        return nothing, [Caveat(
            "scouting_test",
            "a scouting test: [step_test] tells nothing of the rig, so no swing can be predicted. Unless asked"
            " otherwise the amplitude is a tenth of what the voltage limit leaves and the band is as wide as the sensor"
            " can see. Watch the angle, ready to switch off; run it, `estimate`, then plan the real test with `excite"
            " --from-model`.",
        )]  # fmt: skip
    if model is None:
        return nothing, [Caveat(
            "swing_not_predicted",
            "the swing is not predicted: [step_test] lacks gain, natural_frequency or damping_ratio; the amplitude is a"
            " tenth of what the voltage limit leaves. Watch the angle, then complete [step_test].",
        )]  # fmt: skip
    if rig.angle_sensor.noise == 0:
        return nothing, [Caveat("noise_unknown", "no uncertainty is predicted: [angle_sensor] noise is 0")]
    try:
        return {**nothing, **_quantities(profile, model, rig)}, []
    except ExcitationError as error:
        return nothing, [Caveat("uncertainty_not_predicted", f"no uncertainty is predicted: {error}")]


def _quantities(profile: Profile, model: SecondOrder, rig: Rig) -> dict[str, Quantity]:
    sensor = SensorSettings(
        sample_rate=rig.angle_sensor.sample_rate,
        exposure=rig.angle_sensor.exposure,
        noise=rig.angle_sensor.noise,
        clock_known=False,
    )
    reached = predicted_uncertainties(profile, model, sensor)
    units = parameter_units(rig.angle_unit)
    return {
        name: Quantity.normal(getattr(model, name), units[name], getattr(reached, name)) for name in PARAMETER_ORDER
    }


def _band_caveats(profile: Profile, rig: Rig) -> list[Caveat]:
    if profile.band is None:
        return []
    low, high = profile.band
    caveats = []
    fastest = rig.angle_sensor.sample_rate / 2
    if high > fastest:
        caveats.append(Caveat(
            "band_above_sensor",
            f"the band reaches {high:g} Hz, above half the sensor's rate, {fastest:g} Hz: what is above rests on the"
            " alignment of the clocks alone",
        ))  # fmt: skip
    resonance = rig.step_test.natural_frequency
    if resonance is not None and not low < resonance < high:
        caveats.append(Caveat(
            "resonance_outside_band",
            f"the natural frequency expected, {resonance:g} Hz, is outside the band {low:g} to {high:g} Hz: natural"
            " frequency and damping ratio will be poorly determined",
        ))  # fmt: skip
    return caveats


def _sweep_caveats(profile: Profile, rig: Rig) -> list[Caveat]:
    """Where a sweep passes the resonance faster than the rule of `excitation.sweep_rate`, what that does."""
    if profile.kind != "swept-sine" or profile.band is None:
        return []
    resonance = slowest_resonance(rigs_of_the_box(rig), band=profile.band)
    if resonance is None:
        return []
    course, duration = profile.settings["course"], float(profile.settings["sweep_duration_s"])
    needed = sweep_time(resonance, band=profile.band, course=course)
    if duration >= needed:
        return []
    told = distortion_at_rate(resonance, band=profile.band, duration=duration, course=course)
    return [Caveat(
        "fast_sweep",
        f"the sweep is fast for the most lightly damped rig expected: read off sample by sample its peak would be"
        f" {100 * told.peak_loss:.2g} % low, {told.lag:.2g} half-power widths late, {100 * told.widening:.2g} % wider."
        f" `estimate` follows the motion in time and allows for that; for any other reading sweep for {needed:.3g} s,"
        f" not {duration:.3g} s",
    )]  # fmt: skip
