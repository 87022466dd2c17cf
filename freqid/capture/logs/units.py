"""Which unit does a log mean by the words in its header?

Units of time convert to seconds, of voltage to volts, of angle to degrees or radians. A unit is read
from brackets (`angle (deg)`, `u [mV]`), behind a slash, an underscore or the word "in" (`t/ms`, `time_s`,
`Zeit in ms`), or before the words of a count (`ms since midnight`). Whatever is not in the tables below
is kept as written.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from types import MappingProxyType

__all__ = ["ANGLE_UNITS", "TIME_UNITS", "VOLTAGE_UNITS", "bare_name", "canonical_unit", "unit_in_name"]

TIME_UNITS: Mapping[str, float] = MappingProxyType({"s": 1.0, "ms": 1e-3, "us": 1e-6, "min": 60.0})  # in s
VOLTAGE_UNITS: Mapping[str, float] = MappingProxyType({"V": 1.0, "mV": 1e-3, "uV": 1e-6, "kV": 1e3})  # in V
ANGLE_UNITS: Mapping[str, float] = MappingProxyType(  # in rad
    {"deg": math.pi / 180, "rad": 1.0, "mrad": 1e-3}
)

_SPELLINGS: Mapping[str, str] = MappingProxyType(
    {
        **{word: "s" for word in ("s", "sec", "secs", "second", "seconds", "sekunde", "sekunden")},
        **{word: "ms" for word in ("ms", "msec", "millisecond", "milliseconds", "millisekunden")},
        **{word: "us" for word in ("us", "µs", "μs", "usec", "microsecond", "microseconds", "mikrosekunden")},
        **{word: "min" for word in ("min", "minute", "minutes", "minuten")},
        **{word: "V" for word in ("v", "volt", "volts")},
        **{word: "mV" for word in ("mv", "millivolt", "millivolts")},
        **{word: "uV" for word in ("uv", "µv", "μv", "microvolt", "microvolts")},
        **{word: "kV" for word in ("kv", "kilovolt", "kilovolts")},
        **{word: "deg" for word in ("deg", "°", "degree", "degrees", "grad")},
        **{word: "rad" for word in ("rad", "radian", "radians")},
        **{word: "mrad" for word in ("mrad", "milliradian", "milliradians")},
        "hz": "Hz",
    }
)
_NOT_MILLI = frozenset({"MV", "MS", "MRAD"})  # mega is not milli: an upper-case M is no reading of these tables
_BRACKETS = re.compile(r"\(([^()]*)\)|\[([^\[\]]*)\]|\{([^{}]*)\}|<([^<>]*)>")
_COUNT = re.compile(r"^\s*(\S+)\s+(?:since|after|from|of|seit|ab|nach)\s", re.IGNORECASE)
_TRAILING = re.compile(r"(?:_|/|\s+in\s+)\s*([^\s_/()\[\]{}<>]+)\s*$")


def canonical_unit(text: str) -> str | None:
    """The unit's one spelling ("sec" -> "s", "°" -> "deg"), or None for a word that is in no table."""
    word = text.strip().strip("()[]{}<>").strip().rstrip(".")
    if word[:1] == "M" and word.upper() in _NOT_MILLI:
        return None
    return _SPELLINGS.get(word.casefold())


def unit_in_name(name: str) -> str | None:
    """The unit a column's header names: a known one in its one spelling, else the bracket's text; None without."""
    brackets = [next((part for part in match if part), "").strip() for match in _BRACKETS.findall(name)]
    for text in reversed(brackets):
        if known := canonical_unit(text):
            return known
    if (trailing := _TRAILING.search(name)) and (known := canonical_unit(trailing.group(1))):
        return known
    if (count := _COUNT.search(name)) and (known := canonical_unit(count.group(1))) in TIME_UNITS:
        return known
    return next((text for text in reversed(brackets) if text), None)


def bare_name(name: str) -> str:
    """The header without its unit, in lower case: "Time (s)" -> "time", "t_ms" -> "t"."""
    text = _BRACKETS.sub(" ", name)
    if (trailing := _TRAILING.search(text)) and canonical_unit(trailing.group(1)):
        text = text[: trailing.start()]
    return " ".join(text.split()).casefold()
