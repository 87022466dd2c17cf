"""What of a frequency response is to be shown, and with which band?

The phase is unwrapped about the model's, so that a noisy line never adds a turn to all that follow; with an unknown
clock offset the fitted lag is taken out of measurement and model alike. Bands are 95 % intervals: of each line with
its own degrees of freedom, of the model by propagating the covariance of the parameters (JCGM 100:2008, 5.2.2).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from freqid.errors import EstimationError
from freqid.estimate.distortion import EVEN, ODD, UNDIVIDED
from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.identification import Identification
from freqid.estimate.model import IdentifiedModel
from freqid.quantity import coverage_factor

__all__ = ["ModelCurve", "ShownDistortion", "ShownResponse", "model_curve", "shown_distortion", "shown_response"]

Floats = NDArray[np.float64]
_CLEAR = 2.0  # standard uncertainties of its power, from which a line's distortion is shown
_CURVE_POINTS = 500


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ShownResponse:
    """Lines (F,) with half-widths of their 95 % intervals; frequency in Hz, gain in angle unit per V, phase in degrees.

    `noise_gain` is the noise of one line as the gain it would be mistaken for.
    """

    frequency: Floats
    gain: Floats
    gain_half: Floats
    phase: Floats
    phase_half: Floats
    noise_gain: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ModelCurve:
    """The model on a fine grid (N,), units as `ShownResponse`."""

    frequency: Floats
    gain: Floats
    gain_half: Floats
    phase: Floats
    phase_half: Floats


def shown_response(response: FrequencyResponse, model: IdentifiedModel) -> ShownResponse:
    """The lines that can stand on a logarithmic axis (frequency above 0, finite).

    Raises EstimationError where there is none.
    """
    shown_delay = shown_lag(model)
    expected = replace(model.model, delay=0.0).response(response.frequency)
    measured = response.without_delay(model.model.delay)
    aside = np.angle(measured / np.where(expected == 0, 1, expected))
    phase = base_phase(model, response.frequency) + np.degrees(aside) - 360 * response.frequency * shown_delay
    usable = (response.frequency > 0) & np.isfinite(response.variance) & np.isfinite(response.gain)
    usable &= response.gain > 0
    if not usable.any():
        raise EstimationError("no line of the frequency response can be shown: none is finite and above 0 Hz")
    coverage = response.coverage
    noise = response.noise / np.maximum(response.input_amplitude, 1e-300)
    return ShownResponse(
        frequency=response.frequency[usable],
        gain=response.gain[usable],
        gain_half=(coverage * response.gain_uncertainty)[usable],
        phase=phase[usable],
        phase_half=np.minimum(coverage * response.phase_uncertainty, 180.0)[usable],
        noise_gain=noise[usable],
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ShownDistortion:
    """Lines (L,) at which distortion of one kind stands clear of the noise, as the gain it would be mistaken for."""

    kind: str
    frequency: Floats
    gain: Floats


def shown_distortion(identification: Identification) -> tuple[ShownDistortion, ...]:
    """Odd and even distortion at the lines without voltage, and that of several runs; kinds with nothing left out.

    A line counts where its power exceeds twice its own standard uncertainty.
    """
    found: list[ShownDistortion] = []
    levels = identification.distortion
    if levels is not None:
        clear = levels.keep((levels.power > _CLEAR * levels.power_uncertainty) & (levels.linear > 0))
        model = identification.model.model
        for kind, parity in (("odd", ODD), ("even", EVEN), ("any order", UNDIVIDED)):
            one = clear.of(parity)
            gain = one.relative * np.abs(model.response(one.frequency))
            found.append(ShownDistortion(kind=kind, frequency=one.frequency, gain=gain))
    response = identification.response
    if response.nonlinear is not None and levels is None:  # with levels it is what they say, carried to the lines
        seen = (response.nonlinear > 0) & (response.input_amplitude > 0)
        gain = response.nonlinear[seen] / response.input_amplitude[seen]
        found.append(ShownDistortion(kind="from several runs", frequency=response.frequency[seen], gain=gain))
    return tuple(one for one in found if len(one.frequency))


def model_curve(model: IdentifiedModel, band: tuple[float, float]) -> ModelCurve:
    """The model across `band` (Hz), finest about its natural frequency."""
    m = model.model
    near = m.natural_frequency * (1 + np.linspace(-4, 4, 161) * min(m.damping_ratio, 0.2))
    frequency = np.unique(np.concatenate([np.geomspace(*band, _CURVE_POINTS), near]))
    frequency = frequency[(frequency >= band[0]) & (frequency <= band[1])]
    response, sensitivity = m.response(frequency), m.sensitivity(frequency)
    relative = sensitivity / response[:, None]  # real part: of the gain; imaginary part: radians of phase
    factor = coverage_factor(model.degrees_of_freedom)
    phase_relative = relative.imag.copy()
    if not model.clock.offset_known:
        phase_relative[:, 3] = 0.0  # the lag is taken out as fitted: its uncertainty is no part of what is shown
    gain = np.abs(response)
    return ModelCurve(
        frequency=frequency,
        gain=gain,
        gain_half=factor * gain * _spread(relative.real, model.covariance),
        phase=base_phase(model, frequency) - 360 * frequency * shown_lag(model),
        phase_half=factor * np.degrees(_spread(phase_relative, model.covariance)),
    )


def shown_lag(model: IdentifiedModel) -> float:
    """Delay that stays in the phase shown, s: the rig's own where the clocks are known, none where not."""
    return model.model.delay if model.clock.offset_known else 0.0


def base_phase(model: IdentifiedModel, frequency: Floats) -> Floats:
    """Phase of the model without its delay, degrees, continuous: 0 to -180, or -180 to -360 for a reversed sensor."""
    m = model.model
    x = frequency / m.natural_frequency
    lag = np.degrees(np.arctan2(2 * m.damping_ratio * x, 1 - x**2))
    return np.asarray(-lag - (180.0 if m.gain < 0 else 0.0))


def _spread(jacobian: Floats, covariance: Floats) -> Floats:
    return np.asarray(np.sqrt(np.maximum(np.einsum("ni,ij,nj->n", jacobian, covariance, jacobian), 0.0)))
