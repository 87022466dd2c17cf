"""What does an old sheet say? Values typed as text, with their uncertainty, made comparable with a test.

    gain = 12 ± 0.3          half width of a 95 % interval; also +- and +/-, and ± 2.5 %
    gain = 12.0(3)           standard uncertainty in the last digits   (JCGM 100:2008, 7.2.2)
    gain = 12(0.3)           standard uncertainty as it is             (JCGM 100:2008, 7.2.2)
    gain = 12                taken as exact, which a caveat says

A unit may follow (deg/V, Hz, rad/s, s, ms, %); another one is refused. Where a sheet gives overshoot or decrement in
place of the damping ratio, and a peak time in place of the natural frequency, these are worked out from them.
"""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from freqid.crosscheck.findings import Findings
from freqid.errors import CrossCheckError
from freqid.quantity import Quantity
from freqid.second_order import PARAMETER_ORDER, parameter_units
from freqid.step_relations import damping_from_decrement, damping_from_overshoot, normalised_peak_time

__all__ = ["TYPED_NAMES", "TypedSheet", "parse_typed_values"]

_NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_FORM = re.compile(
    rf"^\s*(?P<name>[A-Za-z][\w \-]*?)\s*=\s*(?P<value>{_NUMBER})\s*"
    rf"(?:(?:±|\+/?-)\s*(?P<half>{_NUMBER})\s*(?P<percent>%)?|\(\s*(?P<standard>{_NUMBER})\s*\))?\s*"
    r"(?P<unit>[A-Za-z/%1]*)\s*$"
)
_TIMES = (
    "peak_time", "delay_time_50", "rise_time_0_90", "rise_time_10_90", "settling_time_5", "settling_time_2",
    "time_constant",
)  # fmt: skip
_OTHERS = {
    **dict.fromkeys(_TIMES, "s"),
    "percent_overshoot": "%",
    "log_decrement": "1",
    "resonance_frequency": "Hz",
    "half_power_width": "Hz",
}
TYPED_NAMES = (*PARAMETER_ORDER, *_OTHERS, "resonance_gain")
# what else may stand behind the number, and how many of the quantity's own unit it is
_CONVERTIBLE = {("Hz", "rad/s"): 1 / (2 * math.pi), ("s", "ms"): 1e-3, ("1", "%"): 1e-2}
_LARGEST = 1e30  # squares of it, and of its quotient with any quantity of a rig, still are finite numbers
_EXAMPLE = 'write for example --against "gain=12 ± 0.3"'


@dataclass(frozen=True, slots=True, kw_only=True)
class TypedSheet:
    """The typed values as findings, and the names of those that carry no uncertainty."""

    findings: Findings
    exact: tuple[str, ...]


def parse_typed_values(texts: Sequence[str], *, angle_unit: str, label: str = "typed values") -> TypedSheet:
    """Read texts such as "gain=12 ± 0.3"; raises CrossCheckError where one cannot be read, with what to write."""
    values: dict[str, Quantity] = {}
    for text in texts:
        name, quantity = _parsed(text, angle_unit)
        if name in values:
            raise CrossCheckError(f"--against {text!r}: {name} is given twice; give it once")
        values[name] = quantity
    exact = tuple(name for name, q in values.items() if q.standard_uncertainty == 0)
    return TypedSheet(findings=_findings(_completed(values), angle_unit, label), exact=exact)


def _parsed(text: str, angle_unit: str) -> tuple[str, Quantity]:
    found = _FORM.match(text)
    if found is None:
        comma = re.search(r"\d,\d", text) is not None
        hint = "use a point for the decimals" if comma else _EXAMPLE
        raise CrossCheckError(f"--against {text!r} cannot be read; {hint}")
    name = re.sub(r"[\s-]+", "_", found["name"].strip()).lower()
    own_unit = {**parameter_units(angle_unit), **_OTHERS, "resonance_gain": f"{angle_unit}/V"}.get(name)
    if own_unit is None:
        close = difflib.get_close_matches(name, TYPED_NAMES, n=1, cutoff=0.5)
        hint = f"did you mean {close[0]!r}?" if close else f"known are {', '.join(TYPED_NAMES)}"
        raise CrossCheckError(f"--against {text!r}: unknown quantity {name!r}; {hint}")
    factor = _unit_factor(found["unit"], own_unit, text)
    value = float(found["value"]) * factor
    _check_value(name, value, own_unit, text)
    if found["half"] is not None:
        half = float(found["half"]) * (abs(value) / 100 if found["percent"] else factor)
        _check_uncertainty(half, text)
        return name, _within(value, own_unit, half)
    u = _in_brackets(found["value"], found["standard"]) * factor
    _check_uncertainty(u, text)
    return name, Quantity.normal(value, own_unit, u)


def _check_value(name: str, value: float, unit: str, text: str) -> None:
    """Only the gain (a reversed sensor) and the delay (the two clocks) may be negative, only overshoot and delay 0."""
    told = f"--against {text!r}: {name} = {value:g}{'' if unit == '1' else f' {unit}'}"
    if not abs(value) < _LARGEST:
        raise CrossCheckError(f"{told}: must be below {_LARGEST:g}; check its exponent")
    if name == "percent_overshoot" and not 0 <= value < 100:
        raise CrossCheckError(f"{told}: must be at least 0 and below 100 %; check the value")
    if name == "gain" and value == 0:
        raise CrossCheckError(f"{told}: must not be 0; check the value")
    if name not in ("percent_overshoot", "gain", "delay") and not value > 0:
        raise CrossCheckError(f"{told}: must be above 0; check the value")


def _check_uncertainty(uncertainty: float, text: str) -> None:
    if uncertainty < 0:
        raise CrossCheckError(f"--against {text!r}: the uncertainty must not be negative; leave out its sign")
    if not uncertainty < _LARGEST:
        raise CrossCheckError(f"--against {text!r}: the uncertainty must be below {_LARGEST:g}; check its exponent")


def _within(value: float, unit: str, half: float) -> Quantity:
    u = half / 1.959963984540054
    return Quantity(value=value, unit=unit, standard_uncertainty=u, interval_95=(value - half, value + half))


def _in_brackets(value: str, standard: str | None) -> float:
    """Digits alone count in the last place of the value, a number with a point as it stands."""
    if standard is None:
        return 0.0
    if "." in standard:
        return float(standard)
    decimals = len(value.split(".")[1]) if "." in value else 0
    return float(standard) * 10.0**-decimals


def _unit_factor(unit: str, own: str, text: str) -> float:
    if unit in ("", own):
        return 1.0
    factor = _CONVERTIBLE.get((own, unit))
    if factor is None:
        known = ", ".join([own, *(other for mine, other in _CONVERTIBLE if mine == own)])
        raise CrossCheckError(f"--against {text!r}: the unit {unit!r} does not fit; give {known}, or none")
    return factor


def _completed(values: Mapping[str, Quantity]) -> dict[str, Quantity]:
    """Damping ratio from overshoot or decrement, natural frequency from the peak time, where they were not typed."""
    whole = dict(values)
    routes: tuple[tuple[str, Callable[[float], float]], ...] = (
        ("percent_overshoot", lambda x: float(damping_from_overshoot(x))),
        ("log_decrement", lambda x: float(damping_from_decrement(x))),
    )
    for name, route in routes:
        if "damping_ratio" not in whole and name in whole:
            _add(whole, "damping_ratio", route, [name], "1")
    if "natural_frequency" not in whole and {"peak_time", "damping_ratio"} <= whole.keys():
        _add(
            whole,
            "natural_frequency",
            lambda time, damping: float(normalised_peak_time(damping)) / (2 * math.pi * time),
            ["peak_time", "damping_ratio"],
            "Hz",
        )
    return whole


def _add(whole: dict[str, Quantity], name: str, route: Callable[..., float], sources: list[str], unit: str) -> None:
    """`name` as a function of its sources, uncertainty by JCGM 100, 5.1.2 (slope times standard uncertainty).

    The slope is taken over ± one standard uncertainty, or half the way to where the source loses its meaning.
    """
    given = [whole[source] for source in sources]
    point = [q.value for q in given]
    value = route(*point)
    if not (math.isfinite(value) and value > 0):
        return
    changes = []
    for index, (source, q) in enumerate(zip(sources, given, strict=True)):
        step = min(q.standard_uncertainty, _room(source, q.value) / 2)
        if step == 0:  # taken as exact
            continue
        high, low = list(point), list(point)
        high[index] += step
        low[index] -= step
        changes.append((route(*high) - route(*low)) / (2 * step) * q.standard_uncertainty)
    found = Quantity.finite_or_none(value, unit, math.hypot(*changes))
    if found is not None:
        whole[name] = found


def _room(name: str, value: float) -> float:
    """How far a value lies from where the quantity loses its meaning: 0, and 100 % for the overshoot."""
    return min(value, 100 - value) if name == "percent_overshoot" else value


def _findings(values: Mapping[str, Quantity], angle_unit: str, label: str) -> Findings:
    parameters = {name: values[name] for name in PARAMETER_ORDER if name in values}
    covariance = np.zeros((4, 4))
    vector = np.full(4, np.nan)
    for index, name in enumerate(PARAMETER_ORDER):
        if name in parameters:
            vector[index] = parameters[name].value
            covariance[index, index] = parameters[name].standard_uncertainty ** 2
    return Findings(
        label=label,
        kind="typed values",
        parameters=parameters,
        vector=vector,
        covariance=covariance,
        degrees_of_freedom=math.inf,
        angle_unit=angle_unit,
        offset_known=True,
        measured={name: q for name, q in values.items() if name not in PARAMETER_ORDER},
        implied={"static_gain": parameters["gain"]} if "gain" in parameters else {},
    )
