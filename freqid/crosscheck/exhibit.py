"""What does the reader see of a cause? One small picture's worth of data, with its labels, drawn by whoever shows it.

An `Exhibit` knows nothing of colours or figures: it holds series of points, lines and bands in labelled units, so that
the report draws all causes alike and results/crosscheck.json keeps what was drawn.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

__all__ = ["Exhibit", "Series", "SeriesKind", "SeriesSource"]

Floats = NDArray[np.float64]
SeriesKind = Literal["points", "line", "band"]
SeriesSource = Literal["frequency test", "step test", "model", "noise", "distortion", "limit"]
FEWEST_DIGITS = 5  # significant digits kept in results/crosscheck.json: a picture needs no more


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Series:
    """One set of points of an exhibit; all arrays have the shape (N,).

    `kind` "points" may carry a 95 % half width in `uncertainty`; a "line" joins its points in their order; a "band"
    reaches from `y` up to `upper`. `label` is a few words to stand beside it; `source` says where the knowledge comes
    from, which decides its colour and mark. Raises ValueError where the shapes differ or a number is not finite.
    """

    kind: SeriesKind
    source: SeriesSource
    label: str
    x: Floats
    y: Floats
    upper: Floats | None = None
    uncertainty: Floats | None = None

    def __post_init__(self) -> None:
        for name in ("x", "y", "upper", "uncertainty"):
            given = getattr(self, name)
            if given is None:
                continue
            array = np.array(given, dtype=float)
            if array.ndim != 1 or array.shape != np.shape(self.x):
                raise ValueError(f"{name}: shape {array.shape}, but x has {np.shape(self.x)}; give one number a point")
            if not np.all(np.isfinite(array)):
                raise ValueError(f"{name}: holds a number that is not finite; leave such points out")
            array.flags.writeable = False
            object.__setattr__(self, name, array)
        if (self.kind == "band") != (self.upper is not None):
            raise ValueError(f"upper: belongs to a band, and only to a band; this series is a {self.kind}")

    def as_json(self) -> dict[str, Any]:
        """One entry of "series", numbers to five significant digits."""
        return {
            "kind": self.kind,
            "source": self.source,
            "label": self.label,
            "x": _short(self.x),
            "y": _short(self.y),
            "upper": None if self.upper is None else _short(self.upper),
            "uncertainty": None if self.uncertainty is None else _short(self.uncertainty),
        }

    @classmethod
    def from_json(cls, data: dict[str, Any]) -> Series:
        """Back from the form of results/crosscheck.json."""
        return cls(**data)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Exhibit:
    """The evidence for one cause as a picture: what it shows in one line, labelled axes, and the series.

    Units are "" where the axis is a plain number; `logarithmic` axes are named by "x" or "y".
    """

    title: str
    x_label: str
    x_unit: str
    y_label: str
    y_unit: str
    series: tuple[Series, ...]
    logarithmic: tuple[Literal["x", "y"], ...] = ()

    def as_json(self) -> dict[str, Any]:
        """The form of "exhibit" in results/crosscheck.json."""
        return {
            "title": self.title,
            "x_label": self.x_label,
            "x_unit": self.x_unit,
            "y_label": self.y_label,
            "y_unit": self.y_unit,
            "logarithmic": list(self.logarithmic),
            "series": [one.as_json() for one in self.series],
        }

    @classmethod
    def from_json(cls, data: dict[str, Any] | None) -> Exhibit | None:
        """Back from the form of results/crosscheck.json; None stays None."""
        if data is None:
            return None
        series = tuple(Series.from_json(one) for one in data["series"])
        return cls(**{**data, "series": series, "logarithmic": tuple(data["logarithmic"])})


def _short(values: Floats) -> list[float]:
    return [float(f"{value:.{FEWEST_DIGITS}g}") for value in values]
