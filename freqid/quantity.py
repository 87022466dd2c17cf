"""What is a number worth? A value, its unit, its standard uncertainty and its 95 % interval.

Nothing is reported without the last two. What could not be determined is `None`, with a
`Caveat` that says why; NaN and infinity never leave the program.

Source: JCGM 100:2008 (GUM), 4.3 and G.3 for the interval from Student's t.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, field, replace
from functools import lru_cache
from typing import Any

__all__ = ["Caveat", "Quantity", "coverage_factor", "in_unit", "unit_of"]


def in_unit(unit: str) -> Any:
    """A dataclass field that carries its unit (axis labels, HDF5 attributes and tables read it)."""
    return field(metadata={"unit": unit})


def unit_of(owner: type, name: str) -> str:
    """Unit of the field `name` of the value object `owner`."""
    fields: dict[str, Any] = getattr(owner, "__dataclass_fields__")  # noqa: B009
    return str(fields[name].metadata["unit"])


@lru_cache(maxsize=256)
def coverage_factor(degrees_of_freedom: float = math.inf) -> float:
    """Half-width of the two-sided 95 % interval in standard uncertainties (Student's t; 1.95996 for infinity)."""
    if math.isinf(degrees_of_freedom):
        return 1.959963984540054
    from scipy.special import stdtrit

    return float(stdtrit(max(degrees_of_freedom, 1.0), 0.975))


@dataclass(frozen=True, slots=True, kw_only=True)
class Quantity:
    """A number with its unit and its uncertainty.

    `interval_95` is (low, high) and always holds `value`.

    Examples
    --------
    >>> damping = Quantity.normal(0.118231, "1", 0.000412)
    >>> print(damping)
    0.11823 ± 0.00081
    >>> damping.as_json()["unit"]
    '1'
    """

    value: float
    unit: str
    standard_uncertainty: float
    interval_95: tuple[float, float]

    @classmethod
    def normal(
        cls, value: float, unit: str, standard_uncertainty: float, degrees_of_freedom: float = math.inf
    ) -> Quantity:
        """Symmetric 95 % interval from Student's t with the given degrees of freedom."""
        half = coverage_factor(degrees_of_freedom) * standard_uncertainty
        return cls(
            value=float(value),
            unit=unit,
            standard_uncertainty=float(standard_uncertainty),
            interval_95=(float(value - half), float(value + half)),
        )

    @classmethod
    def finite_or_none(
        cls, value: float, unit: str, standard_uncertainty: float, degrees_of_freedom: float = math.inf
    ) -> Quantity | None:
        """The quantity, or None where value or uncertainty is not finite."""
        if not (math.isfinite(value) and math.isfinite(standard_uncertainty)):
            return None
        return cls.normal(value, unit, standard_uncertainty, degrees_of_freedom)

    @property
    def expanded_uncertainty(self) -> float:
        """Half the width of the 95 % interval."""
        return (self.interval_95[1] - self.interval_95[0]) / 2

    @property
    def size(self) -> Quantity:
        """Its absolute value: a gain of -12 (reversed sensor) is as large as one of 12."""
        if self.value >= 0:
            return self
        low, high = self.interval_95
        return replace(self, value=-self.value, interval_95=(-high, -low))

    def as_json(self) -> dict[str, Any]:
        """The form of results/*.json."""
        return {
            "value": self.value,
            "unit": self.unit,
            "standard_uncertainty": self.standard_uncertainty,
            "interval_95": list(self.interval_95),
        }

    @classmethod
    def from_json(cls, data: dict[str, Any] | None) -> Quantity | None:
        """Back from the form of results/*.json; None stays None."""
        if data is None:
            return None
        low, high = data["interval_95"]
        return cls(
            value=data["value"],
            unit=data["unit"],
            standard_uncertainty=data["standard_uncertainty"],
            interval_95=(low, high),
        )

    def decimals(self) -> int:
        """Decimal places that show two significant digits of the uncertainty (JCGM 100, 7.2.6)."""
        return _decimals(self.expanded_uncertainty, self.value)

    def rounded(self) -> tuple[str, str]:
        """Value and expanded uncertainty as text, rounded together to two digits of the uncertainty."""
        places = self.decimals()
        return f"{self.value:.{places}f}", f"{self.expanded_uncertainty:.{places}f}"

    def __str__(self) -> str:
        value, expanded = self.rounded()
        unit = "" if self.unit == "1" else f" {self.unit}"
        return f"{value} ± {expanded}{unit}"


def _decimals(expanded: float, value: float) -> int:
    reference = expanded if expanded > 0 else abs(value) * 1e-4
    if reference == 0:
        return 0
    return max(0, min(12, 1 - math.floor(math.log10(reference))))


@dataclass(frozen=True, slots=True)
class Caveat:
    """Something the user must know about a result that is usable but doubtful.

    `code` is one stable word for scripts, `message` one sentence for people.
    """

    code: str
    message: str

    def as_json(self) -> dict[str, str]:
        """The form of "warnings" in results/*.json."""
        return {"code": self.code, "message": self.message}

    @classmethod
    def all_from_json(cls, rows: Iterable[dict[str, str]]) -> tuple[Caveat, ...]:
        """Back from "warnings" in results/*.json."""
        return tuple(cls(row["code"], row["message"]) for row in rows)
