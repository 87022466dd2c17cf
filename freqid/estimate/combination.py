"""What do several runs say together? Their mean, whether they agree, and how they depend on amplitude.

Every run is estimated alone; the parameter vectors are averaged with the inverse of their covariances. Where
they scatter more than their uncertainties allow (chi-square at 5 %), the uncertainties are enlarged by that ratio, from
five runs on each parameter by its own, and rest on the degrees of freedom of that scatter; a caveat says so.
On separate clocks each run has its own offset: then the delay is not averaged and stays that of the last run.
A misfit of the model that the runs share does not average out and stays in the uncertainty.
Runs of different amplitude (rms voltages more than 20 % apart) are first held against each other
(`amplitude_dependence`);
where the rig depends on amplitude, only the runs at the amplitude of the last one are averaged.
Source: JCGM 102:2011, and the Birge ratio (R. T. Birge, Phys. Rev. 40 (1932) 207) for the enlargement.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from freqid.errors import EstimationError
from freqid.estimate.adequacy import lack_of_fit
from freqid.estimate.amplitude_dependence import (
    APART,
    DEPENDENT,
    AmplitudeDependence,
    AmplitudePoint,
    amplitude_dependence,
)
from freqid.estimate.distortion_summary import distortion_caveats, summarize_realisations
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.identification import Identification
from freqid.estimate.measured_amplitude import mean_amplitude
from freqid.estimate.misfit_covariance import enlarged_by_lines
from freqid.estimate.model import Adequacy, IdentifiedModel
from freqid.estimate.realisations import mean_response
from freqid.quantity import Caveat
from freqid.second_order import SecondOrder

__all__ = ["combine"]

Floats = NDArray[np.float64]
ENOUGH = 5  # runs from which on each parameter's own scatter counts


def combine(found: Sequence[Identification]) -> Identification:
    """One identification from several runs of one rig; the record shown is that of the last run.

    Raises EstimationError where the runs are in different angle units, or there is none.
    """
    if not found:
        raise EstimationError("no complete run to combine")
    if len(found) == 1:
        return found[0]
    if len({one.model.angle_unit for one in found}) > 1:
        raise EstimationError("the runs are in different angle units: import them with the same rig sheet")
    dependence = _dependence([one.model for one in found])
    alike = list(found)
    if dependence is not None and dependence.significant:
        alike = [one for one in found if _same_amplitude(one.model, found[-1].model)]
    result = _mean(alike) if len(alike) > 1 else alike[0]
    told = () if dependence is None else dependence.caveats(result.model.angle_unit)
    model = replace(result.model, dependence=dependence, caveats=(*result.model.caveats, *told))
    return replace(result, model=model)


def _same_amplitude(one: IdentifiedModel, other: IdentifiedModel) -> bool:
    if one.amplitude is None or other.amplitude is None:
        return True
    first, second = one.amplitude.rms_voltage, other.amplitude.rms_voltage
    return max(first, second) <= APART * min(first, second)


def _dependence(models: Sequence[IdentifiedModel]) -> AmplitudeDependence | None:
    points = []
    for model in models:
        quantities = {name: q for name in DEPENDENT if (q := model.parameters[name]) is not None}
        if model.amplitude is None or len(quantities) < len(DEPENDENT):
            return None
        points.append(AmplitudePoint(run="+".join(model.runs), amplitude=model.amplitude, quantities=quantities))
    freedom = min(model.degrees_of_freedom for model in models)
    return amplitude_dependence(points, angle_unit=models[0].angle_unit, degrees_of_freedom=freedom)


def _mean(found: Sequence[Identification]) -> Identification:
    """The generalised mean of at least two runs."""
    last, models = found[-1].model, [one.model for one in found]
    common = all(model.clock.offset_known and not model.undetermined for model in models)
    kept = [0, 1, 2, 3] if common else [0, 1, 2]
    values = np.array([model.model.vector[kept] for model in models])
    weights = [np.asarray(np.linalg.inv(model.covariance[np.ix_(kept, kept)])) for model in models]
    covariance = np.linalg.inv(np.sum(weights, axis=0))
    mean = covariance @ np.sum([w @ v for w, v in zip(weights, values, strict=True)], axis=0)
    covariance, freedom, caveat = _scattered(values - mean, weights, covariance)
    vector, joint = last.model.vector, last.covariance.copy()
    vector[kept] = mean
    joint[:3, 3] = joint[3, :3] = 0.0
    joint[np.ix_(kept, kept)] = covariance
    fitted = SecondOrder.from_vector(vector)
    combined = mean_response(
        [one.response for one in found], [model.model for model in models], common_clock=last.clock.offset_known
    )
    scatter = summarize_realisations(combined, fitted.natural_frequency)
    amplitudes = [model.amplitude for model in models if model.amplitude is not None]
    adequacy = _adequacy(combined.response, fitted, models)
    degrees = sum(one.degrees_of_freedom for one in models) if freedom is None else freedom
    if adequacy.p_value < 0.05:
        joint, degrees = _with_lasting_misfit(combined.response, fitted, joint, degrees, models)
    model = replace(
        last,
        model=fitted,
        covariance=joint,
        degrees_of_freedom=degrees,
        adequacy=adequacy,
        amplitude=mean_amplitude(amplitudes) if amplitudes else None,
        distortion=(*last.distortion, *scatter),
        runs=tuple(name for one in models for name in one.runs),
        caveats=(*_lasting(last.caveats, adequacy), *distortion_caveats(scatter), *caveat),
    )
    return replace(found[-1], model=model, response=combined.response)


def _lasting(caveats: Sequence[Caveat], adequacy: Adequacy) -> list[Caveat]:
    """What the last run's caveats still say of the mean, which may be adequate where the run was not."""
    return [caveat for caveat in caveats if caveat.code != "model_inadequate" or not adequacy.adequate]


def _with_lasting_misfit(
    response: FrequencyResponse,
    model: SecondOrder,
    covariance: Floats,
    degrees_of_freedom: float,
    models: Sequence[IdentifiedModel],
) -> tuple[Floats, float]:
    """A misfit that every run shares does not average out: at lines the covariance is enlarged by what the mean
    response still shows of it, otherwise no variance falls below the mean of the runs' own.
    """
    if response.method == "periodic":
        held = tuple(number for number in range(4) if covariance[number, number] == 0)
        enlarged = enlarged_by_lines(response, model, covariance, held=held)
        return enlarged.covariance, min(degrees_of_freedom, enlarged.degrees_of_freedom)
    own = np.mean([np.diag(one.covariance) for one in models], axis=0)
    stated = np.diag(covariance)
    ratio = np.maximum(own / np.where(stated > 0, stated, np.inf), 1.0)
    fewest = min(one.degrees_of_freedom for one in models)
    return covariance * np.sqrt(np.outer(ratio, ratio)), min(degrees_of_freedom, fewest)


def _adequacy(response: FrequencyResponse, model: SecondOrder, models: Sequence[IdentifiedModel]) -> Adequacy:
    """The test against the mean of periodic responses; else that of the run that the model describes worst."""
    worst = min((one.adequacy for one in models), key=lambda one: one.p_value if one.p_value == one.p_value else 2.0)
    if response.method != "periodic":
        return worst
    freedom = float(np.sum(response.degrees_of_freedom))
    return replace(
        lack_of_fit(response, model, noise_freedom=freedom), better_structure=worst.better_structure
    )


def _scattered(
    deviation: Floats, weights: Sequence[Floats], covariance: Floats
) -> tuple[Floats, float | None, list[Caveat]]:
    """Covariance of the mean, enlarged where the runs scatter more than they claim; then its degrees of freedom."""
    from scipy.special import chdtrc

    statistic = float(sum(d @ w @ d for d, w in zip(deviation, weights, strict=True)))
    count, width = deviation.shape
    degrees = (count - 1) * width
    if chdtrc(degrees, statistic) >= 0.05:
        return covariance, None, []
    ratio, freedom = np.full(width, statistic / degrees), float(degrees)
    if count >= ENOUGH:
        own = np.array([np.diag(np.linalg.inv(weight)) for weight in weights])
        ratio, freedom = np.maximum(np.sum(deviation**2 / own, axis=0) / (count - 1), 1.0), float(count - 1)
    enlarged = covariance * np.sqrt(np.outer(ratio, ratio))
    return enlarged, freedom, [
        Caveat(
            "runs_differ",
            f"The runs scatter {np.sqrt(statistic / degrees):.2g} times more than their uncertainties allow; the "
            "intervals were widened accordingly. Something changes from run to run: the phases of the excitation and "
            "with them nonlinear distortion, temperature, operating point.",
        )
    ]
