"""How well will a further test measure? The excitation that `excite` would design, and the information in it.

The rig is the one both tests found, the noise what the last record showed. A multisine is designed once, at the usual
duration, and its information grows with the time (periods repeat); a step test is laid out for each duration, because
its steps are whole. Source: `excitation.information`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np

from excitation.information import SensorSettings, predicted_uncertainties
from excitation.profile import Profile
from freqid.crosscheck.next_test import Forecast, Promise, TestKind
from freqid.estimate.identification import Identification
from freqid.rig import Rig
from freqid.second_order import PARAMETER_ORDER, SecondOrder
from freqid.stages.excite import ExciteSettings, designed_profile
from freqid.step_test.step_result import StepResult

__all__ = ["forecast_for"]

Designer = Callable[[TestKind, float | None], Profile]


def forecast_for(
    rig: Rig, found: Identification, step: StepResult, *, design: Designer | None = None
) -> Forecast:
    """A forecast for the rig of the sheet; it designs only when asked, and raises ExcitationError where it cannot.

    `design` makes the profile of a kind and a duration, as `excite` would unless given.
    """
    designs: dict[tuple[TestKind, float | None], Profile] = {}
    model = _both(found.model.model, found.model.covariance, step)
    noise = float(np.sqrt(np.mean(found.residual**2)))
    misfit = max(1.0, found.model.adequacy.statistic / max(found.model.adequacy.degrees_of_freedom, 1))
    enlarged = {"multisine": misfit if found.response.method == "periodic" else 1.0, "step": 1.0}
    make = design or _designer(rig)

    def forecast(kind: TestKind, duration: float | None) -> Promise:
        laid_out = duration if kind == "step" else None
        profile = designs.get((kind, laid_out)) or make(kind, laid_out)
        designs[kind, laid_out] = profile
        reached = predicted_uncertainties(profile, model, _sensor(rig, noise))
        asked = profile.duration if duration is None else duration
        longer = 1.0 if kind == "step" else asked / profile.duration
        factor = math.sqrt(enlarged[kind] / longer)
        return Promise(
            kind=kind,
            duration=asked,
            amplitude=float(np.max(np.abs(profile.voltage - profile.bias))) * (1 - 1e-3),
            standard_uncertainty={name: getattr(reached, name) * factor for name in PARAMETER_ORDER},
        )

    return forecast


def _designer(rig: Rig) -> Designer:
    def make(kind: TestKind, duration: float | None) -> Profile:
        return designed_profile(ExciteSettings(kind=kind, duration=duration), rig)

    return make


def _sensor(rig: Rig, noise: float) -> SensorSettings:
    return SensorSettings(
        sample_rate=rig.angle_sensor.sample_rate, exposure=rig.angle_sensor.exposure, noise=noise, clock_known=False
    )


def _both(model: SecondOrder, covariance: np.ndarray, step: StepResult) -> SecondOrder:
    """The rig as both tests see it: each parameter weighted by its variances, the delay of the frequency test."""
    first, second = np.diag(covariance)[:3], np.diag(step.covariance)[:3]
    weight = np.where(first + second > 0, second / np.maximum(first + second, 1e-300), 0.5)
    mean = weight * model.vector[:3] + (1 - weight) * step.model.vector[:3]
    gain, natural_frequency, damping_ratio = (float(value) for value in mean)
    return replace(model, gain=gain, natural_frequency=natural_frequency, damping_ratio=damping_ratio)
