"""What do gain, natural frequency, damping ratio and delay say in step-test words, and how surely?

Conventions
-----------
Parameters stand in the order gain (angle unit per V), natural frequency (Hz), damping ratio, delay (s).
Times count from the onset of the response, or, for `peak_time`, `delay_time_50` and the settling times with
`delay_included=True`, from the step itself. Rise times are differences within the response and never hold the delay.

Uncertainty: linear propagation with correlations, each sensitivity taken as half the change over ± one standard
uncertainty (JCGM 100:2008, 5.1.3 note 2 and 5.2.2); the 95 % interval is cut where it would leave the possible (an
overshoot below 0 %). Settling times jump where an extreme lies on the edge of the band: there the interval is the
range over the joint 95 % region of the parameters, see `freqid.derived_uncertainty.settling_range`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from freqid.derived_uncertainty import (
    DAMPING,
    DELAY,
    FREQUENCY,
    GAIN,
    NAMES,
    Estimate,
    Spread,
    checked_estimate,
    joint_radius,
    propagated,
    settling_range,
)
from freqid.quantity import Caveat, Quantity, coverage_factor
from freqid.resonance_relations import (
    HIGHEST_RESONANT_DAMPING,
    bandwidth_ratio,
    quality_factor,
    resonance_frequency_ratio,
    resonance_gain_ratio,
)
from freqid.step_relations import (
    logarithmic_decrement,
    normalised_delay_time_50,
    normalised_peak_time,
    normalised_rise_time_0_90,
    normalised_rise_time_10_90,
    normalised_settling_time,
    normalised_time_constant,
    percent_overshoot,
)

__all__ = ["DERIVED_NAMES", "decrement_quantity", "derived_quantities", "settling_quantity", "undefined_reasons"]

Floats = NDArray[np.float64]

SETTLING_BANDS = {"settling_time_5": 0.05, "settling_time_2": 0.02}


@dataclass(frozen=True, slots=True, kw_only=True)
class _Definition:
    """How one quantity follows from the four parameters, and where it can lie."""

    unit: str  # "angle/V" is completed with the angle unit
    value: Callable[[Floats], float]
    depends_on: tuple[int, ...]
    highest: float = math.inf
    from_step: bool = False


def _resonance(point: Floats) -> tuple[float, float]:
    """Frequency and gain of the maximum; from ζ = 1/√2 on that is at frequency zero, the static gain."""
    if point[DAMPING] >= HIGHEST_RESONANT_DAMPING:
        return 0.0, abs(float(point[GAIN]))
    frequency = point[FREQUENCY] * resonance_frequency_ratio(point[DAMPING])
    return float(frequency), float(abs(point[GAIN]) * resonance_gain_ratio(point[DAMPING]))


def _time(relation: Callable[[ArrayLike], Floats], *, from_step: bool = False) -> _Definition:
    """A time that is a normalised time divided by ωn."""
    return _Definition(
        unit="s",
        value=lambda point: float(relation(point[DAMPING])) / (2 * math.pi * float(point[FREQUENCY])),
        depends_on=(FREQUENCY, DAMPING),
        from_step=from_step,
    )


def _settling_relation(band: float) -> Callable[[ArrayLike], Floats]:
    return lambda damping_ratio: normalised_settling_time(damping_ratio, band)


DEFINITIONS: dict[str, _Definition] = {
    "resonance_frequency": _Definition(
        unit="Hz", value=lambda point: _resonance(point)[0], depends_on=(FREQUENCY, DAMPING)
    ),
    "resonance_gain": _Definition(unit="angle/V", value=lambda point: _resonance(point)[1], depends_on=(GAIN, DAMPING)),
    "bandwidth": _Definition(
        unit="Hz",
        value=lambda point: float(point[FREQUENCY] * bandwidth_ratio(point[DAMPING])),
        depends_on=(FREQUENCY, DAMPING),
    ),
    "quality_factor": _Definition(
        unit="1", value=lambda point: float(quality_factor(point[DAMPING])), depends_on=(DAMPING,)
    ),
    "percent_overshoot": _Definition(
        unit="%", value=lambda point: float(percent_overshoot(point[DAMPING])), depends_on=(DAMPING,), highest=100.0
    ),
    "peak_time": _time(normalised_peak_time, from_step=True),
    "delay_time_50": _time(normalised_delay_time_50, from_step=True),
    "rise_time_0_90": _time(normalised_rise_time_0_90),
    "rise_time_10_90": _time(normalised_rise_time_10_90),
    **{name: _time(_settling_relation(band), from_step=True) for name, band in SETTLING_BANDS.items()},
    "time_constant": _time(normalised_time_constant),
}
DERIVED_NAMES = tuple(DEFINITIONS)

# What grows without limit as the damping ratio goes to zero, and as the natural frequency does.
UNLIMITED_WITHOUT_DAMPING = ("resonance_gain", "quality_factor", *SETTLING_BANDS, "time_constant")
TIMES = tuple(name for name, definition in DEFINITIONS.items() if definition.unit == "s")


def derived_quantities(
    parameters: ArrayLike,
    covariance: ArrayLike,
    *,
    angle_unit: str,
    degrees_of_freedom: float = math.inf,
    delay_included: bool = False,
) -> dict[str, Quantity | None]:
    """Resonance, bandwidth and step-test quantities of the second-order model.

    Parameters
    ----------
    parameters : (4,) array
        Gain in angle unit per V (negative for a reversed sensor), natural frequency in Hz, damping ratio, delay in s.
    covariance : (4, 4) array
        Their covariance, in the products of these units.
    angle_unit : str
        "deg" or "rad".
    degrees_of_freedom : float
        Of the covariance; infinite where it is known rather than estimated.
    delay_included : bool
        Whether `peak_time`, `delay_time_50`, `settling_time_5` and `settling_time_2` count from the step (true) or
        from the onset of the response (false). Leave it false where the delay contains an unknown clock offset.

    Returns
    -------
    dict
        `DERIVED_NAMES`, in their order; None where the quantity does not exist or is not determined,
        `undefined_reasons` says why.

    Raises
    ------
    EstimationError
        A parameter is not finite, natural frequency or damping ratio is not positive, or a variance is negative.
    """
    estimate = checked_estimate(parameters, covariance, degrees_of_freedom)
    absent = _absences(estimate, delay_included)
    return {
        name: None if name in absent else _quantity(name, estimate, angle_unit, delay_included)
        for name in DERIVED_NAMES
    }


def settling_quantity(
    parameters: ArrayLike, covariance: ArrayLike, band: float, *, degrees_of_freedom: float = math.inf
) -> Quantity | None:
    """Settling time in s, from the onset, to within ± `band` (a fraction of the final value, 0.015 for 1.5 %).

    Parameters, uncertainty and errors as for `derived_quantities`; None where the 95 % region leaves it without bound.
    """
    estimate = checked_estimate(parameters, covariance, degrees_of_freedom)
    depends_on = [FREQUENCY, DAMPING]
    reach = joint_radius(len(depends_on), degrees_of_freedom) * estimate.uncertainties
    if not np.all(np.isfinite(reach[depends_on])) or np.any(estimate.point[depends_on] <= reach[depends_on]):
        return None
    value = float(normalised_settling_time(estimate.point[DAMPING], band)) / (2 * math.pi * estimate.point[FREQUENCY])
    spread = settling_range(band, estimate, depends_on)
    return Quantity(
        value=float(value),
        unit="s",
        standard_uncertainty=spread.standard_uncertainty,
        interval_95=(float(min(value, max(spread.low, 0.0))), float(max(value, spread.high))),
    )


def decrement_quantity(
    parameters: ArrayLike, covariance: ArrayLike, *, degrees_of_freedom: float = math.inf
) -> Quantity | None:
    """Logarithmic decrement of one full cycle; None from a damping ratio of 1 on, where there is no oscillation.

    Parameters, uncertainty and errors as for `derived_quantities`.
    """
    estimate = checked_estimate(parameters, covariance, degrees_of_freedom)
    value = float(logarithmic_decrement(estimate.point[DAMPING]))
    uncertainty = propagated(lambda point: float(logarithmic_decrement(point[DAMPING])), estimate, [DAMPING])
    return Quantity.finite_or_none(value, "1", uncertainty, degrees_of_freedom)


def undefined_reasons(
    parameters: ArrayLike,
    covariance: ArrayLike,
    *,
    degrees_of_freedom: float = math.inf,
    delay_included: bool = False,
) -> list[Caveat]:
    """Why some of `derived_quantities` are None: one caveat for each cause, naming the quantities it takes away.

    Arguments and errors as for `derived_quantities`. Codes: `no_resonance`, `no_peak`, `derived_undetermined`.
    """
    absent = _absences(checked_estimate(parameters, covariance, degrees_of_freedom), delay_included)
    names: dict[tuple[str, str], list[str]] = {}
    for name, cause in absent.items():
        names.setdefault(cause, []).append(name)
    return [Caveat(code, f"{', '.join(lost)}: {reason}") for (code, reason), lost in names.items()]


def _dependencies(name: str, delay_included: bool) -> list[int]:
    """Indices of the parameters that `name` depends on."""
    definition = DEFINITIONS[name]
    return [*definition.depends_on, DELAY] if definition.from_step and delay_included else [*definition.depends_on]


def _absences(estimate: Estimate, delay_included: bool) -> dict[str, tuple[str, str]]:
    """Code and reason for each quantity that has no value."""
    causes = {name: _absence(name, estimate, _dependencies(name, delay_included)) for name in DERIVED_NAMES}
    return {name: cause for name, cause in causes.items() if cause is not None}


def _absence(name: str, estimate: Estimate, depends_on: list[int]) -> tuple[str, str] | None:
    damping = float(estimate.point[DAMPING])
    if name in ("resonance_frequency", "resonance_gain") and damping >= HIGHEST_RESONANT_DAMPING:
        return "no_resonance", f"none at damping ratio {damping:.4g}; the gain has a maximum only below 0.7071"
    if name == "peak_time" and damping >= 1:
        return "no_peak", f"none at damping ratio {damping:.4g}; the step response overshoots only below 1"
    if not np.all(np.isfinite(estimate.covariance[np.ix_(depends_on, depends_on)])):
        lost = ", ".join(NAMES[index] for index in depends_on if not math.isfinite(estimate.covariance[index, index]))
        return "derived_undetermined", f"the uncertainty of {lost or 'the parameters'} is not known"
    return _unlimited(name, estimate.point, _factor(name, estimate, len(depends_on)) * estimate.uncertainties)


def _factor(name: str, estimate: Estimate, n_parameters: int) -> float:
    """How many standard uncertainties the interval of `name` reaches out along one parameter."""
    if name in SETTLING_BANDS:
        return joint_radius(n_parameters, estimate.degrees_of_freedom)
    return coverage_factor(estimate.degrees_of_freedom)


def _unlimited(name: str, point: Floats, reach: Floats) -> tuple[str, str] | None:
    """The cause, where the parameters' own intervals reach a value at which the quantity has no bound."""
    reason = "the 95 % region of the {} reaches {}, where there is no bound; measure longer or with less noise"
    if name in UNLIMITED_WITHOUT_DAMPING and point[DAMPING] <= reach[DAMPING]:
        return "derived_undetermined", reason.format("damping ratio", 0)
    if name == "peak_time" and point[DAMPING] + reach[DAMPING] >= 1:
        return "derived_undetermined", reason.format("damping ratio", 1)
    if name in TIMES and point[FREQUENCY] <= reach[FREQUENCY]:
        return "derived_undetermined", reason.format("natural frequency", 0)
    return None


def _quantity(name: str, estimate: Estimate, angle_unit: str, delay_included: bool) -> Quantity:
    definition = DEFINITIONS[name]
    with_delay = definition.from_step and delay_included
    depends_on = _dependencies(name, delay_included)
    value = definition.value(estimate.point) + (float(estimate.point[DELAY]) if with_delay else 0.0)
    if name in SETTLING_BANDS:
        spread = settling_range(SETTLING_BANDS[name], estimate, depends_on)
    else:
        uncertainty = propagated(definition.value, estimate, depends_on)
        half = coverage_factor(estimate.degrees_of_freedom) * uncertainty
        spread = Spread(standard_uncertainty=uncertainty, low=value - half, high=value + half)
    lowest = -math.inf if with_delay else 0.0  # a delay that holds a clock offset may be negative
    return Quantity(
        value=value,
        unit=definition.unit.replace("angle", angle_unit),
        standard_uncertainty=spread.standard_uncertainty,
        interval_95=(min(value, max(spread.low, lowest)), max(value, min(spread.high, definition.highest))),
    )
