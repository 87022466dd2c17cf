"""Do gain, natural frequency and damping ratio change with amplitude? A straight line through several runs.

Each run contributes one point: its rms angle and its three quantities. The line is fitted by least squares weighted
with the runs' own uncertainties; where the points miss it by more than these allow (chi-square at 5 %), its uncertainty
is enlarged by that ratio. A dependence is significant where the slope of any of the three differs from zero at 1 %
(each tested at a third of that, Student's t).

The straight line is a summary, not a law: a stiffening spring shifts the frequency with the square of the swing, dry
friction the damping with its inverse.

Source: weighted line fit: JCGM 100:2008, H.3; R. T. Birge, Phys. Rev. 40 (1932) 207 for the enlargement.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.measured_amplitude import MeasuredAmplitude
from freqid.quantity import Caveat, Quantity

__all__ = [
    "DEPENDENT",
    "AmplitudeDependence",
    "AmplitudePoint",
    "AmplitudeTrend",
    "LineFit",
    "amplitude_dependence",
    "fit_line",
]

Floats = NDArray[np.float64]
DEPENDENT = ("gain", "natural_frequency", "damping_ratio")
APART = 1.2  # ratio of rms voltages from which runs count as of different amplitude
SIGNIFICANT = 0.01
MEANING = {
    ("gain", 1): "the rig answers large voltages more strongly (dry friction or play at small ones)",
    ("gain", -1): "the rig answers large voltages less (a stiffening spring or saturation)",
    ("natural_frequency", 1): "the spring hardens",
    ("natural_frequency", -1): "the spring softens",
    ("damping_ratio", 1): "drag grows with speed",
    ("damping_ratio", -1): "dry friction weighs less at large swings",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class AmplitudePoint:
    """One run: its amplitude and its quantities by the names in `DEPENDENT`."""

    run: str
    amplitude: MeasuredAmplitude
    quantities: dict[str, Quantity]

    def as_json(self) -> dict[str, Any]:
        """The form within "amplitude" of results/model.json."""
        return {
            "run": self.run,
            **self.amplitude.as_json(),
            **{name: quantity.as_json() for name, quantity in self.quantities.items()},
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class AmplitudeTrend:
    """How one quantity changes with rms angle.

    `change` is relative, along the line from the smallest to the largest amplitude, over the value at the smallest.
    """

    name: str
    slope: Quantity
    change: Quantity
    p_value: float

    @property
    def significant(self) -> bool:
        """Whether the slope differs from zero, at a third of 1 %."""
        return self.p_value < SIGNIFICANT / len(DEPENDENT)


@dataclass(frozen=True, slots=True, kw_only=True)
class AmplitudeDependence:
    """Points in ascending amplitude, and the trend of each quantity."""

    points: tuple[AmplitudePoint, ...]
    trends: tuple[AmplitudeTrend, ...]

    @property
    def significant(self) -> bool:
        """Whether any quantity changes with amplitude."""
        return any(trend.significant for trend in self.trends)

    def caveats(self, angle_unit: str) -> list[Caveat]:
        """One sentence for each quantity that changes."""
        low, high = self.points[0].amplitude, self.points[-1].amplitude
        return [
            Caveat(
                f"amplitude_dependent_{trend.name}",
                f"The {trend.name.replace('_', ' ')} {'rises' if trend.change.value > 0 else 'falls'} "
                f"{100 * abs(trend.change.value):.2g} % from {low.rms_angle:.2g} to {high.rms_angle:.2g} {angle_unit} "
                f"rms ({low.rms_voltage:.2g} to {high.rms_voltage:.2g} V rms): "
                f"{MEANING[trend.name, 1 if trend.change.value > 0 else -1]}.",
            )
            for trend in self.trends
            if trend.significant
        ]

    def as_json(self) -> dict[str, Any]:
        """The form of "dependence" within "amplitude" of results/model.json."""
        return {
            "points": [point.as_json() for point in self.points],
            "trends": {
                trend.name: {
                    "slope": trend.slope.as_json(),
                    "change": trend.change.as_json(),
                    "p_value": trend.p_value,
                    "significant": trend.significant,
                }
                for trend in self.trends
            },
        }

    @classmethod
    def from_json(cls, data: dict[str, Any]) -> AmplitudeDependence:
        """Back from `as_json`."""
        points = [
            AmplitudePoint(
                run=row["run"],
                amplitude=MeasuredAmplitude.from_json(row),
                quantities={name: _stated(row[name]) for name in DEPENDENT},
            )
            for row in data["points"]
        ]
        trends = [
            AmplitudeTrend(
                name=name, slope=_stated(row["slope"]), change=_stated(row["change"]), p_value=row["p_value"]
            )
            for name, row in data["trends"].items()
        ]
        return cls(points=tuple(points), trends=tuple(trends))


def _stated(data: dict[str, Any]) -> Quantity:
    quantity = Quantity.from_json(data)
    if quantity is None:
        raise ValueError("a quantity against amplitude is missing")
    return quantity


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LineFit:
    """Straight line `intercept` + `slope` x, its covariance (2, 2) and the degrees of freedom behind it (infinite
    where the points' own uncertainties were taken as they are).
    """

    intercept: float
    slope: float
    covariance: Floats
    degrees_of_freedom: float


def fit_line(x: Floats, y: Floats, uncertainty: Floats) -> LineFit:
    """Weighted least-squares line through at least two points (N,) at different x with their `uncertainty` (N,).

    The covariance is that of the points, enlarged by chi-square over its degrees of freedom where that is significant
    at 5 %.
    """
    from scipy.special import chdtrc

    weight = 1 / uncertainty
    design = np.stack([np.ones_like(x), x], axis=1) * weight[:, None]
    inverse = np.linalg.inv(design.T @ design)
    intercept, slope = inverse @ design.T @ (y * weight)
    rest = (y - intercept - slope * x) * weight
    degrees, chi_square = len(x) - 2, float(rest @ rest)
    scattered = degrees > 0 and chdtrc(degrees, chi_square) < 0.05
    return LineFit(
        intercept=float(intercept),
        slope=float(slope),
        covariance=np.asarray(inverse * (chi_square / degrees if scattered else 1.0)),
        degrees_of_freedom=float(degrees) if scattered else np.inf,
    )


def amplitude_dependence(
    points: Sequence[AmplitudePoint], *, angle_unit: str, degrees_of_freedom: float
) -> AmplitudeDependence | None:
    """Trends over the runs; None where their rms voltages differ by less than 20 % or an uncertainty is missing.

    `degrees_of_freedom` are those behind each run's own uncertainties.
    """
    voltages = [point.amplitude.rms_voltage for point in points]
    if len(points) < 2 or min(voltages) <= 0 or max(voltages) <= APART * min(voltages):
        return None
    order = sorted(points, key=lambda point: point.amplitude.rms_angle)
    swing = np.array([point.amplitude.rms_angle for point in order])
    stated = np.array([[q.standard_uncertainty for q in point.quantities.values()] for point in order])
    if swing[-1] <= swing[0] or not np.all(np.isfinite(stated) & (stated > 0)):
        return None
    lines = {name: _line(swing, [point.quantities[name] for point in order]) for name in DEPENDENT}
    trends = [
        _trend(name, line, swing, unit=f"{order[0].quantities[name].unit}/{angle_unit}", freedom=degrees_of_freedom)
        for name, line in lines.items()
    ]
    return AmplitudeDependence(points=tuple(order), trends=tuple(trends))


def _line(swing: Floats, quantities: list[Quantity]) -> LineFit:
    value = np.array([quantity.value for quantity in quantities])
    return fit_line(swing, value, np.array([quantity.standard_uncertainty for quantity in quantities]))


def _trend(name: str, line: LineFit, swing: Floats, *, unit: str, freedom: float) -> AmplitudeTrend:
    from scipy.special import stdtr

    freedom = min(line.degrees_of_freedom, freedom)
    uncertainty = float(np.sqrt(line.covariance[1, 1]))
    span, first = float(swing[-1] - swing[0]), line.intercept + line.slope * swing[0]
    change = line.slope * span / first
    # change = (value at the end - first) / first: derivatives by intercept and slope
    by = np.array([-change / first, (span - change * swing[0]) / first])
    return AmplitudeTrend(
        name=name,
        slope=Quantity.normal(line.slope, unit, uncertainty, freedom),
        change=Quantity.normal(change, "1", float(np.sqrt(by @ line.covariance @ by)), freedom),
        p_value=float(2 * stdtr(min(freedom, 1e9), -abs(line.slope) / uncertainty)),
    )
