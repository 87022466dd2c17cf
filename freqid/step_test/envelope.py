"""How do the swings die away? Extremes of every step against time, and what they say of viscous and of dry friction.

Half a cycle maps the distance from the settled level onto the next one,

    |a[k+1]| = r |a[k]| - f (1 + r),     r = exp(-pi zeta / sqrt(1 - zeta^2))

with viscous damping zeta and a friction torque worth the angle f. Viscous damping alone (f = 0) makes an exponential
envelope, dry friction alone (r = 1) a straight line that loses 2 f every half cycle.

Source: H. Helmholtz and Lord Rayleigh for the two limits; B. F. Feeny & J. W. Liang, "A decrement method for the
simultaneous estimation of Coulomb and viscous friction", J. Sound and Vibration 195 (1996) 149-154.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from freqid.quantity import Quantity, in_unit
from freqid.step_relations import damping_from_half_cycle_peaks

__all__ = ["Decay", "Extremes", "fit_decay"]

Floats = NDArray[np.float64]
DecayKind = Literal["viscous", "dry friction", "viscous and dry friction", "undecided"]
FEWEST_PAIRS = 3
SIGNIFICANT = 3.0  # standard uncertainties


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Extremes:
    """Peaks and troughs of one step that stand clear of the noise, in their order.

    `time` (E,) from the onset; `deviation` (E,) from the settled level, its sign kept; `uncertainty` (E,) of it.
    """

    time: Floats = in_unit("s")
    deviation: Floats = in_unit("angle_unit")
    uncertainty: Floats = in_unit("angle_unit")

    def as_json(self) -> dict[str, list[float]]:
        """The form of "extremes" in results/step.json."""
        return {
            "time": [float(x) for x in self.time],
            "deviation": [float(x) for x in self.deviation],
            "standard_uncertainty": [float(x) for x in self.uncertainty],
        }

    @classmethod
    def from_json(cls, data: dict[str, list[float]]) -> Extremes:
        """Back from the form of results/step.json."""
        return cls(
            time=np.array(data["time"], dtype=float),
            deviation=np.array(data["deviation"], dtype=float),
            uncertainty=np.array(data["standard_uncertainty"], dtype=float),
        )

    @property
    def decrement_by_amplitude(self) -> tuple[Floats, Floats, Floats]:
        """Logarithmic decrement of each cycle (from one half to the next), the size it began with, its uncertainty."""
        size, relative = np.abs(self.deviation), self.uncertainty / np.maximum(np.abs(self.deviation), 1e-300)
        return 2 * np.log(size[:-1] / size[1:]), size[:-1], 2 * np.hypot(relative[:-1], relative[1:])


@dataclass(frozen=True, slots=True, kw_only=True)
class Decay:
    """Viscous damping ratio and friction angle that explain the swings of all steps, and which of them acts."""

    kind: DecayKind
    damping_ratio: Quantity
    friction_angle: Quantity
    pairs: int

    def as_json(self) -> dict[str, Any]:
        """The form of "decay" in results/step.json."""
        return {
            "kind": self.kind,
            "damping_ratio": self.damping_ratio.as_json(),
            "friction_angle": self.friction_angle.as_json(),
            "pairs": self.pairs,
        }

    @classmethod
    def from_json(cls, data: dict[str, Any] | None) -> Decay | None:
        """Back from the form of results/step.json; None stays None."""
        if data is None:
            return None
        damping, friction = Quantity.from_json(data["damping_ratio"]), Quantity.from_json(data["friction_angle"])
        if damping is None or friction is None:
            raise ValueError("decay: damping_ratio and friction_angle are needed")
        return cls(kind=data["kind"], damping_ratio=damping, friction_angle=friction, pairs=data["pairs"])


def fit_decay(extremes: list[Extremes], *, angle_unit: str) -> Decay | None:
    """Viscous and dry friction from the extremes of all steps; None where fewer than three pairs, or all of one size.

    A weighted straight line through (|a[k]|, |a[k+1]|); the uncertainty of both is counted with the line's slope.
    """
    first = np.concatenate([np.abs(one.deviation[:-1]) for one in extremes] or [np.empty(0)])
    second = np.concatenate([np.abs(one.deviation[1:]) for one in extremes] or [np.empty(0)])
    u_first = np.concatenate([one.uncertainty[:-1] for one in extremes] or [np.empty(0)])
    u_second = np.concatenate([one.uncertainty[1:] for one in extremes] or [np.empty(0)])
    if len(first) < FEWEST_PAIRS or np.ptp(first) < 0.05 * np.max(first):
        return None
    slope = float(np.sum(first * second) / np.sum(first**2))
    design = np.stack([first, -np.ones_like(first)], axis=1)
    for _ in range(3):
        weight = 1 / np.hypot(u_second, slope * u_first)
        normal = np.linalg.inv((design * weight[:, None]).T @ (design * weight[:, None]))
        slope, loss = (float(x) for x in normal @ (design.T @ (weight**2 * second)))
    excess = np.sum((weight * (second - design @ np.array([slope, loss]))) ** 2) / max(len(first) - 2, 1)
    covariance = normal * max(1.0, float(excess))
    return _decay(slope, loss, covariance, len(first), angle_unit)


def _decay(slope: float, loss: float, covariance: Floats, pairs: int, angle_unit: str) -> Decay | None:
    if not (0 < slope < 1.5 and np.all(np.isfinite(covariance))):
        return None
    friction = loss / (1 + slope)
    by = np.array([-loss / (1 + slope) ** 2, 1 / (1 + slope)])
    u_friction = float(np.sqrt(by @ covariance @ by))
    u_slope = float(np.sqrt(covariance[0, 0]))
    damping = float(damping_from_half_cycle_peaks(1.0, slope))
    by_slope = abs(float(damping_from_half_cycle_peaks(1.0, slope + 1e-6)) - damping) / 1e-6
    dry, viscous = friction > SIGNIFICANT * u_friction, 1 - slope > SIGNIFICANT * u_slope
    kinds: dict[tuple[bool, bool], DecayKind] = {
        (True, True): "viscous and dry friction",
        (True, False): "dry friction",
        (False, True): "viscous",
        (False, False): "undecided",
    }
    return Decay(
        kind=kinds[bool(dry), bool(viscous)],
        damping_ratio=Quantity.normal(damping, "1", by_slope * u_slope),
        friction_angle=Quantity.normal(friction, angle_unit, u_friction),
        pairs=pairs,
    )
