"""Which second-order rig explains the whole record best? Least squares at the true instants.

Output-error fit: gain, natural frequency, damping ratio and lag, jointly with clock ratio, rest angle and
the motion at the start, by Levenberg-Marquardt from several starts. In white noise this is maximum likelihood and
reaches
the Cramer-Rao bound whatever the excitation. The covariance allows for coloured residuals: with spectrum S of the
residual

    cov = (J'J)^-1 (J' V J) (J'J)^-1,   J'VJ evaluated line by line with S   ("sandwich")

Source: L. Ljung, *System Identification*, 2nd ed. 1999, ch. 7 and 9 (output error, asymptotic covariance); damping of
the steps: H. B. Nielsen, *Damping Parameter in Marquardt's Method*, IMM-REP-1999-05.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from freqid.errors import EstimationError
from freqid.estimate.prediction import MotionParameters, Prediction, angle_only, predict
from freqid.estimate.record import Record
from freqid.estimate.starting_values import Candidate, starting_values
from freqid.second_order import SecondOrder

__all__ = ["RecordFit", "fit_record", "is_half_wave", "refine"]

Floats = NDArray[np.float64]
LEAST_WHITE = 0.7  # von Neumann's ratio over its value in white noise
WELL_EXPLAINED = 0.98  # no other basin can be better than this by more than noise
ASKEW = 2.0  # sums of squares up to so many times the best are worth a fit of the other sign
TRIAL_EVALUATIONS = 12  # enough to tell the basins of several starts apart
TRIAL_FRAMES = 4000  # at least, where there are as many
FIRST_DAMPING, LARGEST_DAMPING = 1e-3, 1e10  # of Marquardt, on a normal matrix of unit diagonal
NEGLIGIBLE = 1e-4
ROUNDING = 1e-13
LONGEST_STEP = 3.0  # of the logarithms


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

    Of a long record the starts see only some frames, evenly chosen. Raises EstimationError where no start leads
    anywhere.
    """
    candidates = starting_values(record) if starts is None else starts
    some = record.keep(np.arange(len(record.stamp)) % max(len(record.stamp) // TRIAL_FRAMES, 1) == 0)
    trials = []
    for candidate in candidates:
        start = MotionParameters(
            model=candidate.model, clock_ratio=candidate.clock_ratio, rest_angle=float(np.mean(record.angle))
        )
        trial = refine(some, start, evaluations=TRIAL_EVALUATIONS)
        if trial is not None:
            trials.append(trial)
            if trial.explained > WELL_EXPLAINED and _leaves_noise(trial.residual):
                break
    trials.sort(key=lambda fit: fit.sum_of_squares)
    best = refine(record, trials[0].parameters) if trials else None
    if best is None:
        raise EstimationError(
            "no second-order model could be fitted to the record: check that input and angle belong together", None
        )
    return _with_better_sign(record, best)


def _leaves_noise(residual: Floats) -> bool:
    """Whether successive residuals differ as those of noise do: in a quiet record a wrong rig may explain 99 %.

    Half the mean square of the differences over the variance is 1 for white noise (J. von Neumann 1941).
    """
    spread = float(np.var(residual))
    return spread == 0 or float(np.mean(np.diff(residual) ** 2)) / 2 > LEAST_WHITE * spread


def is_half_wave(record: Record) -> bool:
    """Whether the voltage's second half period is the first one reversed (odd lines only)."""
    periodicity = record.periodicity
    return periodicity is not None and bool(np.all(np.round(periodicity.lines * periodicity.period) % 2 == 1))


def _with_better_sign(record: Record, fit: RecordFit) -> RecordFit:
    """The fit, or one reversed and half a period off: with odd lines on two clocks only the onset tells them apart."""
    if record.common_clock or record.periodicity is None or not is_half_wave(record):
        return fit
    best, m = fit, fit.parameters.model
    for shift in (-0.5, 0.5):
        other = replace(m, gain=-m.gain, delay=m.delay + shift * record.periodicity.period)
        start = replace(fit.parameters, model=other)
        # a fit pulled askew by the wrong onset is still better the right way round
        if float(np.sum((record.angle - angle_only(record, start)) ** 2)) < ASKEW * fit.sum_of_squares:
            trial = refine(record, start)
            if trial is not None and trial.sum_of_squares < best.sum_of_squares:
                best = trial
    return best


def refine(record: Record, start: MotionParameters, *, evaluations: int = 100) -> RecordFit | None:
    """Levenberg-Marquardt from one start, at most so many evaluations; None where it fails.

    Natural frequency and damping ratio move in proportion. The descent ends after a step that promised less than
    `NEGLIGIBLE` of the residual's variance, so less than a hundredth of a standard uncertainty in any direction.
    """
    current = _at(record, start)
    if current is None:
        return None
    damping, growth = FIRST_DAMPING, 2.0
    for _ in range(evaluations - 1):
        slopes = current.prediction.jacobian * _scale(current)
        size = np.maximum(np.linalg.norm(slopes, axis=0), 1e-150)  # its square is still a number
        normal = (slopes.T @ slopes) / np.outer(size, size)
        downhill = (slopes.T @ current.residual) / size
        step = np.linalg.solve(normal + damping * np.eye(len(size)), downhill)
        promised = float(step @ (downhill + damping * step))
        trial = _at(record, _moved(current, step / size))
        gained = -np.inf if trial is None else current.sum_of_squares - trial.sum_of_squares
        if trial is not None and gained > 0:
            settled = promised < NEGLIGIBLE * trial.sum_of_squares / max(trial.degrees_of_freedom, 1)
            current = trial
            if settled:
                break
            damping *= max(1 / 3, 1 - (2 * gained / promised - 1) ** 3)
            growth = 2.0
        elif damping > LARGEST_DAMPING or promised <= ROUNDING * current.sum_of_squares:
            break
        else:
            damping, growth = damping * growth, growth * 2
    return current


def _at(record: Record, p: MotionParameters) -> RecordFit | None:
    """The record predicted with `p`; None where that overflows."""
    with np.errstate(all="ignore"):
        prediction = predict(record, p)
    if not (np.all(np.isfinite(prediction.jacobian)) and np.all(np.isfinite(prediction.angle))):
        return None
    return RecordFit(parameters=p, prediction=prediction, residual=record.angle - prediction.angle)


def _scale(fit: RecordFit) -> Floats:
    """What one unit of each free parameter's step changes it by: natural frequency and damping ratio by e times."""
    scale = np.ones(8)
    scale[1:3] = fit.parameters.vector[1:3]
    return scale[list(fit.prediction.free)]


def _moved(fit: RecordFit, step: Floats) -> MotionParameters:
    vector = fit.parameters.vector
    full = np.zeros(8)
    full[list(fit.prediction.free)] = step
    vector[1:3] *= np.exp(np.clip(full[1:3], -LONGEST_STEP, LONGEST_STEP))
    full[1:3] = 0.0
    return MotionParameters.from_vector(vector + full)


def with_model(fit: RecordFit, model: SecondOrder) -> MotionParameters:
    """The motion of `fit` with another model."""
    vector = fit.parameters.vector
    vector[:4] = model.vector
    return MotionParameters.from_vector(vector)
