"""What are quantities called before people, and how are their numbers written?

One rule of rounding everywhere: two significant digits of the expanded uncertainty (95 %), the value to the same place
(JCGM 100:2008, 7.2.6). What is None is called undetermined.
"""

from __future__ import annotations

import math

from freqid.quantity import Quantity

__all__ = [
    "UNDETERMINED",
    "interval",
    "label_of",
    "minus",
    "number",
    "sentence_case",
    "unit_shown",
    "with_uncertainty",
    "without_unit",
]

UNDETERMINED = "undetermined"

_WORDS = {
    "percent_overshoot": "percent overshoot",
    "delay_time_50": "delay time (50 %)",
    "rise_time_0_90": "rise time 0–90 %",
    "rise_time_10_90": "rise time 10–90 %",
    "settling_time_5": "settling time to 5 %",
    "settling_time_2": "settling time to 2 %",
    "log_decrement": "logarithmic decrement",
    "time_constant": "dominant time constant",
    "steady_state_error": "steady-state error",
    "resonance_gain": "gain at resonance",
    "half_power_width": "half-power width",
}


def label_of(name: str) -> str:
    """The name of a quantity in words: "settling_time_5" is "settling time to 5 %"."""
    return _WORDS.get(name, name.replace("_", " "))


def unit_shown(unit: str) -> str:
    """The unit as written after a number; nothing for "1"."""
    return "" if unit in ("1", "") else unit


def without_unit(quantity: Quantity | None) -> str:
    """Value ± expanded uncertainty, rounded together."""
    if quantity is None:
        return UNDETERMINED
    value, expanded = quantity.rounded()
    return f"{minus(value)} ± {expanded}"


def with_uncertainty(quantity: Quantity | None) -> str:
    """Value ± expanded uncertainty and unit, rounded together."""
    text = without_unit(quantity)
    unit = "" if quantity is None else unit_shown(quantity.unit)
    return f"{text} {unit}" if unit else text


def interval(quantity: Quantity | None) -> str:
    """The 95 % interval, to the place its width allows."""
    if quantity is None:
        return ""
    places = quantity.decimals()
    low, high = quantity.interval_95
    return f"{minus(f'{low:.{places}f}')} to {minus(f'{high:.{places}f}')}"


def number(value: float | None, digits: int = 3) -> str:
    """A figure of merit that has no uncertainty of its own, to `digits` significant digits."""
    if value is None or not math.isfinite(value):
        return UNDETERMINED
    return minus(f"{value:.0f}" if 10**digits <= abs(value) < 1e9 else f"{value:.{digits}g}")


def minus(text: str) -> str:
    """A true minus sign in front of negative numbers, none before zero."""
    if not text.startswith("-"):
        return text
    return text[1:] if not text.strip("-0.") else f"−{text[1:]}"


def sentence_case(text: str) -> str:
    """The text with its first letter large."""
    return text[:1].upper() + text[1:]
