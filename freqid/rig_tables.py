"""Which keys does the rig sheet have, what does each mean, and what may it hold?

One frozen dataclass per table of rig.toml; each field is a key and carries its unit, its allowed range
and one sentence of explanation in its metadata. Reading, refusing (`freqid.rig`) and the commented
template (`freqid.rig_template`) all follow these fields: a new key is one new line here.

Angles are in the rig's own `angle_unit`. Uncertainties of [step_test] are relative, at 95 %.
"""

from __future__ import annotations

from dataclasses import MISSING, dataclass, field
from typing import Any, Literal

__all__ = [
    "AngleSensor",
    "Identity",
    "KeyRule",
    "Limits",
    "Output",
    "Range",
    "Requirements",
    "Simulated",
    "StepTest",
    "Tolerance",
]


@dataclass(frozen=True, slots=True)
class Range:
    """An interval of allowed numbers; its text is what an error message says."""

    low: float
    high: float
    low_open: bool = False
    high_open: bool = False

    def __contains__(self, value: float) -> bool:
        above = value > self.low if self.low_open else value >= self.low
        below = value < self.high if self.high_open else value <= self.high
        return above and below

    def __str__(self) -> str:
        low = f"{'above' if self.low_open else 'at least'} {self.low:.10g}"
        return f"{low} and {'below' if self.high_open else 'at most'} {self.high:.10g}"


@dataclass(frozen=True, slots=True, kw_only=True)
class KeyRule:
    """What one key of the rig sheet may hold, and what the template says of it.

    `allowed` is a `Range` for numbers, a tuple of words for choices, `str` for free text, `bool` for
    yes or no. `template` is the value of the built-in vane (None: the line is written commented out).
    """

    explanation: str
    unit: str
    allowed: Range | tuple[str, ...] | type
    template: float | str | bool | None


def _key(
    explanation: str, unit: str, allowed: Range | tuple[str, ...] | type, template: Any, *, default: Any = MISSING
) -> Any:
    rule = KeyRule(explanation=explanation, unit=unit, allowed=allowed, template=template)
    return field(default=default, metadata={"unit": unit, "rule": rule})


_VOLTS = Range(0, 1e4, low_open=True)
_ANGLES = Range(0, 3600, low_open=True)
_RATES = Range(0.1, 1e6)
_RELATIVE = Range(0, 1, high_open=True)
_TOLERANCES = Range(0, 1, low_open=True)
_GAINS = Range(0, 1e6, low_open=True)
_FREQUENCIES = Range(0, 1e5, low_open=True)
_DAMPINGS = Range(0, 100, low_open=True)
_DELAYS = Range(0, 60)


@dataclass(frozen=True, slots=True, kw_only=True)
class Identity:
    """[rig]: what it is called and in which unit its angle is told."""

    name: str = _key("what the report calls it", "", str, "spring-centred vane")
    angle_unit: Literal["deg", "rad"] = _key("unit of every angle in this sheet", "", ("deg", "rad"), "deg")


@dataclass(frozen=True, slots=True, kw_only=True)
class Limits:
    """[limits]: what must never be exceeded."""

    voltage: float = _key("no sample ever exceeds it, either sign", "V", _VOLTS, 5.0)
    slew_rate: float = _key("fastest change of the voltage", "V/s", Range(0, 1e9, low_open=True), 500.0)
    angle: float = _key("end stops, from the operating point", "angle_unit", _ANGLES, 30.0)
    bias: float = _key("voltage at the operating point", "V", Range(-1e4, 1e4), 0.0, default=0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class Output:
    """[output]: what turns samples into voltage; `loopback_full_scale` is that of the output unless given."""

    sample_rate: float = _key("of the output converter", "Hz", _RATES, 1000.0)
    hold: Literal["zero-order", "smooth"] = _key(
        "a staircase, or a smooth signal (sound interface)", "", ("zero-order", "smooth"), "zero-order"
    )
    full_scale: float = _key("voltage at digital full scale", "V", _VOLTS, 10.0)
    loopback_full_scale: float | None = _key(
        "of the input that records it (sound interface); as above unless given", "V", _VOLTS, None, default=None
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class AngleSensor:
    """[angle_sensor]: what watches the angle; `full_scale` is None where no analog sensor is used."""

    sample_rate: float = _key("nominal", "Hz", _RATES, 60.0)
    exposure: float = _key("the angle is averaged over it; 0 for an encoder", "s", Range(0, 60), 0.004)
    stamp: Literal["start", "middle", "end"] = _key(
        "what a time stamp marks of the exposure", "", ("start", "middle", "end"), "end"
    )
    noise: float = _key("rms of a reading", "angle_unit", Range(0, 3600), 0.3)
    full_scale: float | None = _key(
        "angle at digital full scale (analog sensor on a sound interface)", "angle_unit", _ANGLES, 45.0, default=None
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class StepTest:
    """[step_test]: what it already told; used to plan, never to estimate. None where it told nothing."""

    gain: float | None = _key("static gain", "angle_unit/V", _GAINS, 12.0, default=None)
    natural_frequency: float | None = _key("undamped", "Hz", _FREQUENCIES, 3.0, default=None)
    damping_ratio: float | None = _key("1 is critical damping", "", _DAMPINGS, 0.12, default=None)
    delay: float | None = _key("from voltage to angle", "s", _DELAYS, 0.02, default=None)
    gain_uncertainty: float = _key("relative, at 95 %", "", _RELATIVE, 0.05, default=0.05)
    natural_frequency_uncertainty: float = _key("relative, at 95 %", "", _RELATIVE, 0.05, default=0.05)
    damping_ratio_uncertainty: float = _key("relative, at 95 %", "", _RELATIVE, 0.20, default=0.20)

    @property
    def predicts_swing(self) -> bool:
        """Whether gain, natural frequency and damping ratio are all known."""
        return None not in (self.gain, self.natural_frequency, self.damping_ratio)


@dataclass(frozen=True, slots=True, kw_only=True)
class Tolerance:
    """[tolerance]: what counts as agreement of the two tests, relative."""

    gain: float = _key("relative", "", _TOLERANCES, 0.05, default=0.05)
    natural_frequency: float = _key("relative", "", _TOLERANCES, 0.02, default=0.02)
    damping_ratio: float = _key("relative", "", _TOLERANCES, 0.10, default=0.10)


def _wanted(explanation: str, unit: str, allowed: Range) -> Any:
    """A key of [requirements]: none unless given."""
    return _key(explanation, unit, allowed, None, default=None)


_TIMES = Range(0, 1e5, low_open=True)
_PERCENT = Range(0, 100)


@dataclass(frozen=True, slots=True, kw_only=True)
class Requirements:
    """[requirements]: what the rig must do to be accepted, each None unless given.

    A key ends in `_max` or `_min`; before it stands the quantity. `settling_time_max` goes with `settling_band`.
    """

    percent_overshoot_max: float | None = _wanted("overshoot of a step", "%", _PERCENT)
    peak_time_max: float | None = _wanted("from the onset to the first peak", "s", _TIMES)
    delay_time_50_max: float | None = _wanted("from the onset to 50 %", "s", _TIMES)
    rise_time_0_90_max: float | None = _wanted("from the onset to 90 %", "s", _TIMES)
    rise_time_10_90_max: float | None = _wanted("from 10 to 90 %", "s", _TIMES)
    settling_time_5_max: float | None = _wanted("until it stays within 5 %", "s", _TIMES)
    settling_time_2_max: float | None = _wanted("until it stays within 2 %", "s", _TIMES)
    settling_time_max: float | None = _wanted("until it stays within settling_band", "s", _TIMES)
    settling_band: float | None = _wanted("for settling_time_max, relative: 0.015 is 1.5 %", "", Range(1e-6, 0.5))
    gain_min: float | None = _wanted("static gain, at least (its size)", "angle_unit/V", _GAINS)
    gain_max: float | None = _wanted("static gain, at most (its size)", "angle_unit/V", _GAINS)
    natural_frequency_min: float | None = _wanted("undamped, at least", "Hz", _FREQUENCIES)
    natural_frequency_max: float | None = _wanted("undamped, at most", "Hz", _FREQUENCIES)
    damping_ratio_min: float | None = _wanted("at least", "", _DAMPINGS)
    damping_ratio_max: float | None = _wanted("at most", "", _DAMPINGS)
    bandwidth_min: float | None = _wanted("where the power gain is half the static one", "Hz", _FREQUENCIES)
    resonance_gain_max: float | None = _wanted("largest gain", "angle_unit/V", _GAINS)
    delay_max: float | None = _wanted("from voltage to angle", "s", _DELAYS)


@dataclass(frozen=True, slots=True, kw_only=True)
class Simulated:
    """[simulated]: the rig that rehearse and capture --simulate use.

    Gain, natural frequency, damping ratio and delay are those of [step_test] unless given, `noise` is
    that of [angle_sensor]; each is None where neither table has it. A negative gain is a reversed sensor.
    """

    gain: float | None = _key("static gain; negative: a reversed sensor", "angle_unit/V", Range(-1e6, 1e6), 12.1,
                              default=None)  # fmt: skip
    natural_frequency: float | None = _key("undamped", "Hz", _FREQUENCIES, 3.02, default=None)
    damping_ratio: float | None = _key("1 is critical damping", "", _DAMPINGS, 0.118, default=None)
    delay: float | None = _key("from voltage to angle", "s", _DELAYS, 0.021, default=None)
    clock_ratio_ppm: float = _key(
        "by how much the sensor's second is longer, in millionths", "ppm", Range(-1e4, 1e4), 150.0, default=0.0
    )
    clock_offset: float = _key("true time at sensor stamp zero", "s", Range(-1e5, 1e5), 0.35, default=0.0)
    common_clock: bool = _key("both streams on one clock (then no offset)", "", bool, False, default=False)
    jitter: float = _key("rms of the stamps about the true times", "s", Range(0, 1), 0.001, default=0.0005)
    lost_frames: float = _key("fraction of the frames", "", Range(0, 0.9), 0.02, default=0.01)
    noise: float | None = _key("rms; the sensor's unless given", "angle_unit", Range(0, 3600), None, default=None)
    quantisation: float = _key("smallest step of the angle; 0: none", "angle_unit", Range(0, 3600), 0.0, default=0.0)
    # planted faults, all off by default
    faults_in: Literal["both", "response", "step"] = _key(
        "which test the faults below are planted in", "", ("both", "response", "step"), "both", default="both"
    )
    dry_friction: float = _key("Coulomb friction as an angle", "angle_unit", Range(0, 3600), None, default=0.0)
    static_friction: float = _key("to set off; dry_friction if below", "angle_unit", Range(0, 3600), None, default=0.0)
    backlash: float = _key("play between shaft and sensor, whole gap", "angle_unit", Range(0, 3600), None, default=0.0)
    spring_hardening: float = _key(
        "relative change of stiffness at the end stops; negative softens", "", Range(-0.9, 100), None, default=0.0
    )
    spring_asymmetry: float = _key(
        "relative change of stiffness at the upper stop, opposite at the lower", "", Range(-0.9, 0.9), None, default=0.0
    )
    end_stop: float | None = _key("angle at which the rig hits a stop", "angle_unit", _ANGLES, None, default=None)
    restitution: float = _key("rate after over rate before hitting a stop", "", Range(0, 0.99), None, default=0.5)
    saturation: float | None = _key("the output clips here, from rest", "V", _VOLTS, None, default=None)
    gain_asymmetry: float = _key("gain up minus down, relative", "", Range(-1.9, 1.9), None, default=0.0)
    slew_limit: float | None = _key("the driver changes no faster", "V/s", Range(0, 1e9, low_open=True), None,
                                    default=None)  # fmt: skip
    driver_pole: float | None = _key("corner of the driver's lag", "Hz", _FREQUENCIES, None, default=None)
    second_mode_frequency: float | None = _key("of a second mode", "Hz", _FREQUENCIES, None, default=None)
    second_mode_gain: float = _key("static gain of that mode, relative", "", Range(-10, 10), None, default=0.0)
    second_mode_damping: float = _key("damping ratio of that mode", "", _DAMPINGS, None, default=0.02)
    sensor_pole: float | None = _key("corner of a filter in the sensor", "Hz", _FREQUENCIES, None, default=None)
    hidden_exposure: float = _key("exposure beyond [angle_sensor] exposure", "s", Range(0, 10), None, default=0.0)
    drift: float = _key("of the rest angle over a run", "angle_unit", Range(-3600, 3600), None, default=0.0)
    voltage_scale: float = _key("voltage at the rig over voltage as told", "", Range(0.01, 100), None, default=1.0)
    angle_scale: float = _key("angle as read over angle", "", Range(0.01, 100), None, default=1.0)
    time_base_ppm: float = _key("by how much the played second is too long", "ppm", Range(-5e5, 1e6), None, default=0.0)
    silent_losses: float = _key("frames lost without a gap in the stamps", "", Range(0, 1000), None, default=0.0)
