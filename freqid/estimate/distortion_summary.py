"""How loud is the distortion around the resonance, against the noise and against the swing itself?

Powers are averaged over the detection lines within half an octave of the natural frequency (at least the three
nearest). `excess` is the rms distortion of a line over its rms noise, `relative` the same over the linear answer there.
The distortion is called significant where noise alone would give as much power in less than 1 of 200 records: the
mean of |A|^2 / s^2 over n lines is Fisher's F with 2 n and v degrees of freedom. From several realisations the
stochastic distortion of a single run is read in the same way at the excited lines.

Source: Pintelon & Schoukens, *System Identification*, 2nd ed. 2012, ch. 4.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.distortion import EVEN, ODD, UNDIVIDED, DistortionLevels
from freqid.estimate.realisations import CombinedResponse
from freqid.quantity import Caveat, Quantity

__all__ = ["DistortionSummary", "distortion_caveats", "summarize_distortion", "summarize_realisations"]

Floats = NDArray[np.float64]
REACH = 0.5  # octaves either side of the natural frequency
FEWEST = 3
SIGNIFICANT = 0.005
NAMES = {ODD: "odd", EVEN: "even", UNDIVIDED: "all"}


@dataclass(frozen=True, slots=True, kw_only=True)
class DistortionSummary:
    """Distortion of one kind around the resonance.

    `kind` is "odd", "even", "all" (where even harmonics are excited too and the two cannot be told apart) or
    "stochastic" (from the scatter of several realisations). `amplitude` is that of one line (rms times sqrt 2, angle
    unit), `band` the lowest and the highest of the `lines` lines looked at, Hz.
    """

    kind: str
    amplitude: Quantity
    excess: Quantity
    relative: Quantity
    p_value: float
    lines: int
    band: tuple[float, float]

    @property
    def significant(self) -> bool:
        """Whether noise alone would hardly give as much."""
        return self.p_value < SIGNIFICANT

    def as_json(self) -> dict[str, Any]:
        """The form of "distortion" in results/model.json."""
        return {
            "kind": self.kind,
            "amplitude": self.amplitude.as_json(),
            "excess": self.excess.as_json(),
            "relative": self.relative.as_json(),
            "p_value": self.p_value,
            "significant": self.significant,
            "lines": self.lines,
            "band": list(self.band),
        }

    @classmethod
    def from_json(cls, data: dict[str, Any]) -> DistortionSummary:
        """Back from `as_json`."""
        amplitude, excess, relative = (Quantity.from_json(data[name]) for name in ("amplitude", "excess", "relative"))
        if amplitude is None or excess is None or relative is None:
            raise ValueError("a distortion without its figures")
        return cls(
            kind=data["kind"],
            amplitude=amplitude,
            excess=excess,
            relative=relative,
            p_value=data["p_value"],
            lines=data["lines"],
            band=(data["band"][0], data["band"][1]),
        )


def summarize_distortion(
    levels: DistortionLevels | None, natural_frequency: float, *, angle_unit: str
) -> tuple[DistortionSummary, ...]:
    """One summary for each kind of distortion that has detection lines; none without levels."""
    if levels is None:
        return ()
    present = [parity for parity in NAMES if np.any(levels.parity == parity)]
    return tuple(_summary(levels.of(parity), NAMES[parity], natural_frequency, angle_unit) for parity in present)


def distortion_caveats(found: tuple[DistortionSummary, ...]) -> list[Caveat]:
    """One sentence for each significant distortion."""
    return [
        Caveat(
            f"distortion_{one.kind}",
            f"{_name(one)} exceeds the noise {one.excess.value:.2g} times around the resonance "
            f"({_decibels(one.excess.value)}; from {one.band[0]:.3g} to {one.band[1]:.3g} Hz, {one.lines} "
            f"lines); it is {100 * one.relative.value:.2g} % of the linear answer there.",
        )
        for one in found
        if one.significant
    ]


def _name(one: DistortionSummary) -> str:
    if one.kind == "stochastic":
        return "Nonlinear distortion that changes with the phases of the excitation"
    return "Nonlinear distortion" if one.kind == "all" else f"{one.kind.capitalize()} nonlinear distortion"


def _decibels(ratio: float) -> str:
    return f"{20 * math.log10(max(ratio, 1e-12)):+.0f} dB"


def _summary(lines: DistortionLevels, kind: str, natural_frequency: float, angle_unit: str) -> DistortionSummary:
    from scipy.special import fdtrc

    near = lines.keep(_around(lines.frequency, natural_frequency))
    count, noise = len(near.frequency), float(np.mean(near.noise**2))
    freedom = float(np.min(near.noise_freedom))
    power = float(np.mean(near.power))
    own = 2 * np.maximum(near.power, 0.0) * near.noise**2 + near.noise**4
    uncertainty = math.sqrt(float(np.sum(own)) / count**2 + 2 / freedom * noise**2)  # the lines share their noise level
    ratio = float(np.mean(near.power / near.noise**2)) + 1
    linear = float(np.mean(near.linear**2))
    return DistortionSummary(
        kind=kind,
        amplitude=_root(power, uncertainty, angle_unit),
        excess=_root(power / noise, uncertainty / noise, "1"),
        relative=_root(power / linear, uncertainty / linear, "1"),
        p_value=float(fdtrc(2 * count, freedom, ratio)),
        lines=count,
        band=(float(near.frequency[0]), float(near.frequency[-1])),
    )


def _root(power: float, uncertainty: float, unit: str) -> Quantity:
    """Square root of a power: the ends of its 95 % interval are the roots of the power's (0 where that is negative)."""
    value = math.sqrt(max(power, 0.0))
    low, high = (math.sqrt(max(power + sign * 1.96 * uncertainty, 0.0)) for sign in (-1, 1))
    high = max(high, value)
    return Quantity(value=value, unit=unit, standard_uncertainty=(high - low) / 3.92, interval_95=(low, high))


def summarize_realisations(combined: CombinedResponse, natural_frequency: float) -> tuple[DistortionSummary, ...]:
    """The stochastic distortion of a single run from the scatter of several; () where they do not tell it.

    That takes lines, and at least two runs that were driven with different voltages.
    """
    from scipy.special import fdtrc

    mean, count = combined.response, combined.realisations
    if count < 2 or mean.method != "periodic":
        return ()
    near = _around(mean.frequency, natural_frequency)
    recorded = mean.noise[near] ** 2 / mean.noise_variance[near]
    noise = count * float(np.mean(mean.noise[near] ** 2))
    total = count * float(np.mean(mean.variance[near] * recorded))
    linear = float(np.mean((mean.gain[near] * mean.input_amplitude[near]) ** 2))
    freedom = 2.0 * (count - 1) * len(near)
    power, uncertainty = total - noise, math.sqrt(2 / freedom) * total
    return (
        DistortionSummary(
            kind="stochastic",
            amplitude=_root(power, uncertainty, mean.angle_unit),
            excess=_root(power / noise, uncertainty / noise, "1"),
            relative=_root(power / linear, uncertainty / linear, "1"),
            p_value=float(fdtrc(freedom, float(np.min(combined.noise_freedom[near])), total / noise)),
            lines=len(near),
            band=(float(mean.frequency[near[0]]), float(mean.frequency[near[-1]])),
        ),
    )


def _around(frequency: Floats, natural_frequency: float) -> NDArray[np.intp]:
    """Numbers of the lines within `REACH` of the natural frequency, at least the `FEWEST` nearest."""
    octaves = np.abs(np.log2(frequency / natural_frequency))
    nearest = np.argsort(octaves, kind="stable")[: max(int(np.sum(octaves <= REACH)), FEWEST)]
    return np.sort(nearest)
