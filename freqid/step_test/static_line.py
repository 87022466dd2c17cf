"""Which angle belongs to which voltage at rest, and does it depend on the side it was reached from?

A weighted plane through the settled levels of all steps,

    level = rest + gain * voltage + hysteresis * (1/2 after a step up, -1/2 after a step down)

so that a level reached from above and the same reached from below may differ. The uncertainty is the larger of what
the noise gives and what the scatter about the plane gives (JCGM 100:2008, 4.2).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from freqid.quantity import Quantity

__all__ = ["StaticLine", "fit_static_line"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class StaticLine:
    """Static gain from the settled levels, and how much higher (in the sense of the gain) a level lies after a step up.

    `hysteresis` is None where every level was reached from one side only.
    """

    gain: Quantity
    hysteresis: Quantity | None
    levels: int

    def as_json(self) -> dict[str, Any]:
        """The form of "static_line" in results/step.json."""
        return {
            "gain": self.gain.as_json(),
            "hysteresis": None if self.hysteresis is None else self.hysteresis.as_json(),
            "levels": self.levels,
        }

    @classmethod
    def from_json(cls, data: dict[str, Any] | None) -> StaticLine | None:
        """Back from the form of results/step.json; None stays None."""
        if data is None:
            return None
        gain = Quantity.from_json(data["gain"])
        if gain is None:
            raise ValueError("static_line: gain is needed")
        return cls(gain=gain, hysteresis=Quantity.from_json(data["hysteresis"]), levels=data["levels"])


def fit_static_line(
    voltage: Floats, level: Floats, uncertainty: Floats, up: NDArray[np.bool_], *, angle_unit: str
) -> StaticLine | None:
    """The plane through levels (N,) with their standard uncertainties, at voltages (N,) V, each reached `up` or not.

    None where there are fewer than three levels or all stand at one voltage.
    """
    if len(level) < 3 or np.ptp(voltage) == 0:
        return None
    weight = 1 / np.maximum(uncertainty, 1e-300)
    weight = weight / np.max(weight)
    side = np.where(up, 0.5, -0.5)
    columns = [np.ones_like(voltage), voltage]
    told_apart = _told_apart(voltage, side)
    if told_apart:
        columns.append(side)
    design = np.stack(columns, axis=1) * weight[:, None]
    inverse = np.linalg.pinv(design.T @ design)
    solution = inverse @ (design.T @ (weight * level))
    degrees = len(level) - len(columns)
    internal = float(np.max(1 / np.maximum(uncertainty, 1e-300))) ** -2
    rest = weight * level - design @ solution
    external = float(rest @ rest) / degrees if degrees > 0 else internal
    variance = np.diag(inverse) * max(internal, external)
    freedom = float(degrees) if external > internal else float("inf")
    return StaticLine(
        gain=Quantity.normal(float(solution[1]), f"{angle_unit}/V", float(np.sqrt(variance[1])), freedom),
        hysteresis=Quantity.normal(float(solution[2]), angle_unit, float(np.sqrt(variance[2])), freedom)
        if told_apart
        else None,
        levels=len(level),
    )


def _told_apart(voltage: Floats, side: Floats) -> bool:
    """Whether some voltage was reached from both sides (else gain and hysteresis look alike)."""
    for one in np.unique(voltage):
        here = side[np.isclose(voltage, one, rtol=0, atol=0.02 * np.ptp(voltage))]
        if len(here) and np.min(here) < np.max(here):
            return True
    return False
