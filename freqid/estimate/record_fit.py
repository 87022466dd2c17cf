"""Which second-order rig explains the whole record best? Least squares at the true instants.

Output-error fit: gain, natural frequency, damping ratio and lag, jointly with clock ratio, rest angle and
the motion at the start, by Levenberg-Marquardt from several starts. In white noise this is maximum likelihood and
reaches
the Cramer-Rao bound whatever the excitation. The covariance allows for coloured residuals: with spectrum S of the
residual

    cov = (J'J)^-1 (J' V J) (J'J)^-1,   J'VJ evaluated line by line with S   ("sandwich")

Source: L. Ljung, *System Identification*, 2nd ed. 1999, ch. 7 and 9 (output error, asymptotic covariance).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from freqid.errors import EstimationError
from freqid.estimate.prediction import MotionParameters, Prediction, angle_only, free_parameters, predict
from freqid.estimate.record import Record
from freqid.estimate.starting_values import Candidate, starting_values
from freqid.second_order import SecondOrder

__all__ = ["RecordFit", "fit_record", "refine"]

Floats = NDArray[np.float64]
WELL_EXPLAINED = 0.98  # no other basin can be better than this by more than noise
TRIAL_EVALUATIONS = 12  # enough to tell the basins of several starts apart


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RecordFit:
    """The fitted motion, its residual (N,) in angle units and its derivatives at the optimum."""

    parameters: MotionParameters
    prediction: Prediction
    residual: Floats

    @property
    def explained(self) -> float:
        """Share of the angle's variance that the model explains."""
        angle = self.prediction.angle + self.residual
        return float(1 - np.var(self.residual) / np.var(angle))

    @property
    def degrees_of_freedom(self) -> int:
        """Frames minus fitted parameters."""
        return len(self.residual) - int(self.prediction.jacobian.shape[1])

    @property
    def sum_of_squares(self) -> float:
        """Sum of squared residuals."""
        return float(self.residual @ self.residual)


def fit_record(record: Record, *, starts: list[Candidate] | None = None) -> RecordFit:
    """Fit the record from the given starts, or from `starting_values`; the best end wins.

    Raises EstimationError where no start leads anywhere.
    """
    candidates = starting_values(record) if starts is None else starts
    trials = []
    for candidate in candidates:
        start = MotionParameters(
            model=candidate.model, clock_ratio=candidate.clock_ratio, rest_angle=float(np.mean(record.angle))
        )
        trial = refine(record, start, evaluations=TRIAL_EVALUATIONS)
        if trial is not None:
            trials.append(trial)
            if trial.explained > WELL_EXPLAINED:
                break
    trials.sort(key=lambda fit: fit.sum_of_squares)
    best = refine(record, trials[0].parameters) if trials else None
    if best is None:
        raise EstimationError(
            "no second-order model could be fitted to the record: check that input and angle belong together", None
        )
    return best


def refine(record: Record, start: MotionParameters, *, evaluations: int = 100) -> RecordFit | None:
    """Levenberg-Marquardt from one start; None where it fails."""
    from scipy.optimize import least_squares

    free = list(free_parameters(record))
    base = start.vector
    scale = np.ones(len(base))
    scale[3] = 1 / start.model.natural_frequency / 10
    scale[4] = scale[3] / max(record.stamp[-1] - record.stamp[0], 1e-9)
    scale[[5, 6, 7]] = np.std(record.angle)
    scale[0] = abs(start.model.gain) or 1.0
    positive = [free.index(1), free.index(2)]

    def unpack(x: Floats) -> MotionParameters:
        vector = base.copy()
        vector[free] = base[free] + x * scale[free]
        vector[1:3] = base[1:3] * np.exp(np.clip(x[positive], -12, 12))
        return MotionParameters.from_vector(vector)

    def residual(x: Floats) -> Floats:
        return record.angle - angle_only(record, unpack(x))

    def jacobian(x: Floats) -> Floats:
        p = unpack(x)
        j = -predict(record, p).jacobian * scale[free]
        j[:, positive] *= np.array([p.model.natural_frequency, p.model.damping_ratio])
        return j

    try:
        found = least_squares(
            residual, np.zeros(len(free)), jac=jacobian, method="lm", x_scale="jac", max_nfev=evaluations
        )
        p = unpack(found.x)
        prediction = predict(record, p)
    except (ValueError, FloatingPointError, np.linalg.LinAlgError):
        return None
    if not np.all(np.isfinite(prediction.jacobian)):
        return None
    return RecordFit(parameters=p, prediction=prediction, residual=record.angle - prediction.angle)


def with_model(fit: RecordFit, model: SecondOrder) -> MotionParameters:
    """The motion of `fit` with another model."""
    vector = fit.parameters.vector
    vector[:4] = model.vector
    return MotionParameters.from_vector(vector)
