"""How well does one rig with one fault explain both tests at once? Least squares over all records together.

One rig (gain, natural frequency, damping ratio) for all records; lag, clock ratio and rest angle of each record its
own; and the numbers of the fault. With n frames and residual sum of squares RSS in each record, twice the logarithm of
the likelihood is - sum n ln RSS: the noise of each record need not be known. The fit is Gauss-Newton with the linear
rig's derivatives, which serve because a faulty rig is still mostly that rig; its weights follow the residuals of each
record.

Source: G. Seber & C. Wild, *Nonlinear Regression*, 1989, ch. 2 (concentrated likelihood); G. Schwarz, Ann. Statist. 6
(1978) 461-464.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from freqid.crosscheck.causes.recorded_tests import RecordedTest
from freqid.errors import CaptureError
from freqid.estimate.prediction import MotionParameters, angle_only

__all__ = ["Hypothesis", "JointFit", "SharedRig", "predicted_linear"]

Floats = NDArray[np.float64]
SHARED = 3  # gain, natural frequency, damping ratio
HALVINGS = 3


class Hypothesis(Protocol):
    """A fault with its numbers: what it predicts for one test, and by how much to vary each number for a derivative."""

    def predict(self, test: RecordedTest, p: MotionParameters, numbers: Floats) -> Floats:
        """Angle (N,) at the frames of `test`."""
        ...

    @property
    def looked_at(self) -> int:
        """How many of the numbers (the leading ones) a first look varies."""
        ...

    def steps(self, numbers: Floats) -> Floats:
        """Difference steps of the numbers."""
        ...

    def bounded(self, numbers: Floats) -> Floats:
        """The nearest numbers that are possible."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class JointFit:
    """A joint fit: parameters of each record, numbers of the fault with their standard uncertainties, residuals."""

    parameters: tuple[MotionParameters, ...]
    numbers: Floats
    uncertainty: Floats
    residuals: tuple[Floats, ...]

    @property
    def log_likelihood(self) -> float:
        """Twice the logarithm of the likelihood, without its constant."""
        return -sum(len(r) * float(np.log(max(float(r @ r), 1e-300))) for r in self.residuals)

    @property
    def effective_share(self) -> float:
        """Independent values per frame, from the correlation of neighbouring residuals (first-order process)."""
        top = sum(float(r[1:] @ r[:-1]) / max(float(r @ r), 1e-300) * len(r) for r in self.residuals)
        correlation = min(max(top / sum(len(r) for r in self.residuals), 0.0), 0.98)
        return (1 - correlation) / (1 + correlation)


def predicted_linear(test: RecordedTest, p: MotionParameters) -> Floats:
    """What a healthy rig records."""
    return angle_only(test.record, p)


class SharedRig:
    """The joint least-squares problem; its derivatives by the linear parameters are taken once."""

    def __init__(self, tests: tuple[RecordedTest, ...]) -> None:
        self.tests = tests
        self._free = tuple(test.fit.prediction.free for test in tests)
        self._own = [len(free) - SHARED for free in self._free]
        self.n_linear = SHARED + sum(self._own)
        n_frames = [len(test.record.stamp) for test in tests]
        self.n_frames = sum(n_frames)
        self._rows = np.cumsum([0, *n_frames])
        self._linear = np.zeros((self.n_frames, self.n_linear))
        column = SHARED
        for i, test in enumerate(tests):
            jacobian = test.fit.prediction.jacobian
            rows = slice(self._rows[i], self._rows[i + 1])
            self._linear[rows, :SHARED] = jacobian[:, :SHARED]
            self._linear[rows, column : column + self._own[i]] = jacobian[:, SHARED:]
            column += self._own[i]
        self._start = self._pooled_start()

    def _pooled_start(self) -> Floats:
        """The information-weighted mean of what the records tell, with each record's own parameters."""
        information, moment = np.zeros((SHARED, SHARED)), np.zeros(SHARED)
        for test in self.tests:
            weight = np.linalg.pinv(test.covariance)
            information += weight
            moment += weight @ test.fit.parameters.vector[:SHARED]
        shared = np.linalg.solve(information, moment)
        lowest = np.min([test.fit.parameters.vector[1:SHARED] for test in self.tests], axis=0)
        highest = np.max([test.fit.parameters.vector[1:SHARED] for test in self.tests], axis=0)
        shared[1:] = np.clip(shared[1:], lowest, highest)
        pairs = zip(self.tests, self._free, strict=True)
        own = [test.fit.parameters.vector[list(free[SHARED:])] for test, free in pairs]
        return np.concatenate([shared, *own])

    def parameters(self, state: Floats) -> tuple[MotionParameters, ...]:
        """Each record's parameters under a state (shared three, then each record's own)."""
        found, column = [], SHARED
        for test, free in zip(self.tests, self._free, strict=True):
            vector = test.fit.parameters.vector
            vector[:SHARED] = state[:SHARED]
            vector[list(free[SHARED:])] = state[column : column + len(free) - SHARED]
            column += len(free) - SHARED
            found.append(MotionParameters.from_vector(vector))
        return tuple(found)

    def residual(self, hypothesis: Hypothesis, state: Floats, numbers: Floats) -> Floats:
        """Measured minus predicted at every frame of every record, in one row."""
        parts = [
            test.record.angle - hypothesis.predict(test, p, numbers)
            for test, p in zip(self.tests, self.parameters(state), strict=True)
        ]
        return np.concatenate(parts)

    def split(self, row: Floats) -> tuple[Floats, ...]:
        """One row, record by record."""
        return tuple(row[a:b] for a, b in zip(self._rows[:-1], self._rows[1:], strict=True))

    def objective(self, residual: Floats) -> float:
        """sum n ln RSS: minus twice the logarithm of the likelihood."""
        return sum(len(r) * float(np.log(max(float(r @ r), 1e-300))) for r in self.split(residual))

    def weights(self, residual: Floats) -> Floats:
        """1 / rms of the record that each frame belongs to."""
        parts = self.split(residual)
        return np.concatenate([np.full(len(r), 1 / max(float(np.sqrt(np.mean(r**2))), 1e-12)) for r in parts])

    def fit(
        self,
        hypothesis: Hypothesis,
        numbers: Floats,
        *,
        state: Floats | None = None,
        passes: int = 6,
        own_slopes: bool = False,
    ) -> tuple[JointFit, Floats]:
        """The best fit near `numbers` and the state it ends in; raises CaptureError where the start cannot be.

        `own_slopes` takes the derivatives by the linear parameters from the faulty rig too: for strong faults.
        """
        at = self._start.copy() if state is None else state.copy()
        numbers = hypothesis.bounded(np.asarray(numbers, dtype=float))
        residual = self.residual(hypothesis, at, numbers)
        value = self.objective(residual)
        uncertainty = np.zeros(len(numbers))
        for _ in range(passes):
            linear = self._slopes(hypothesis, at, numbers, residual) if own_slopes else self._linear
            change, uncertainty = self._step(hypothesis, at, numbers, residual, linear)
            moved = self._descend(hypothesis, at, numbers, change, value)
            if moved is None:
                break
            at, numbers, residual, now = moved
            gained, value = value - now, now
            if gained < 0.05:
                break
        return (
            JointFit(
                parameters=self.parameters(at),
                numbers=numbers,
                uncertainty=uncertainty,
                residuals=self.split(residual),
            ),
            at,
        )

    def first_order(
        self, hypothesis: Hypothesis, numbers: Floats, state: Floats, healthy: Floats | None = None
    ) -> tuple[float, Floats]:
        """Objective after one linear step from `numbers`, and the numbers there (within bounds).

        `healthy` is the residual at `numbers` where it is known, because they are those of the healthy rig.
        """
        residual = self.residual(hypothesis, state, numbers) if healthy is None else healthy
        looked_at = hypothesis.looked_at
        design, weight = self._design(hypothesis, state, numbers, residual, looked_at)
        change = _solve(design, residual * weight)
        reached = numbers.copy()
        reached[:looked_at] += change[self.n_linear :]
        reached = hypothesis.bounded(reached)
        # within the bounds the numbers are as they are, the linear parameters follow
        shift = (reached - numbers)[:looked_at]
        left = residual * weight - design[:, self.n_linear :] @ shift
        left = left - design[:, : self.n_linear] @ _solve(design[:, : self.n_linear], left)
        return self.objective(left / weight), reached

    def _design(
        self, hypothesis: Hypothesis, at: Floats, numbers: Floats, residual: Floats, n_varied: int
    ) -> tuple[Floats, Floats]:
        columns = []
        for i, step in enumerate(hypothesis.steps(numbers)[:n_varied]):
            other = numbers.copy()
            other[i] += step
            columns.append((residual - self.residual(hypothesis, at, other)) / step)
        weight = self.weights(residual)
        design = np.column_stack([self._linear, *columns]) if columns else self._linear
        return design * weight[:, None], weight

    def _step(
        self, hypothesis: Hypothesis, at: Floats, numbers: Floats, residual: Floats, linear: Floats
    ) -> tuple[Floats, Floats]:
        design, weight = self._design(hypothesis, at, numbers, residual, len(numbers))
        design[:, : self.n_linear] = linear * weight[:, None]
        change = _solve(design, residual * weight)
        scale = np.maximum(np.linalg.norm(design, axis=0), 1e-300)
        inverse = np.linalg.pinv((design / scale).T @ (design / scale), rcond=1e-12)
        deviation = np.sqrt(np.maximum(np.diag(inverse), 0)) / scale
        return change, deviation[self.n_linear :]

    def _slopes(self, hypothesis: Hypothesis, at: Floats, numbers: Floats, residual: Floats) -> Floats:
        """Derivatives by the linear parameters with the fault in place, the delays and clock ratios of all at once."""
        slopes = self._linear.copy()
        steps = 1e-3 * np.abs(at[:SHARED])
        for i in range(SHARED):
            other = at.copy()
            other[i] += steps[i]
            slopes[:, i] = (residual - self.residual(hypothesis, other, numbers)) / steps[i]
        period = 1 / at[1]
        for number, step in ((3, 1e-3 * period), (4, 1e-3 * period / max(np.ptp(t.record.stamp) for t in self.tests))):
            columns = self._columns_of(number)
            if not columns:
                continue
            other = at.copy()
            other[[c for c, _ in columns]] += step
            slope = (residual - self.residual(hypothesis, other, numbers)) / step
            for column, rows in columns:
                slopes[rows, column] = slope[rows]
        return slopes

    def _columns_of(self, number: int) -> list[tuple[int, slice]]:
        """Column and rows of each record's own parameter `number`, where it is free."""
        found, column = [], SHARED
        for i, free in enumerate(self._free):
            own = free[SHARED:]
            if number in own:
                found.append((column + own.index(number), slice(self._rows[i], self._rows[i + 1])))
            column += len(own)
        return found

    def _descend(
        self, hypothesis: Hypothesis, at: Floats, numbers: Floats, change: Floats, value: float
    ) -> tuple[Floats, Floats, Floats, float] | None:
        for halving in range(HALVINGS + 1):
            part = change * 0.5**halving
            state = at + part[: self.n_linear]
            if np.any(state[1:SHARED] <= 0.2 * at[1:SHARED]):
                continue
            trial = hypothesis.bounded(numbers + part[self.n_linear :])
            try:
                residual = self.residual(hypothesis, state, trial)
            except CaptureError:
                continue
            now = self.objective(residual)
            if now < value:
                return state, trial, residual, now
        return None


def _solve(design: Floats, target: Floats) -> Floats:
    """Least squares by the normal equations of scaled columns."""
    scale = np.maximum(np.linalg.norm(design, axis=0), 1e-300)
    scaled = design / scale
    gram = scaled.T @ scaled
    return np.asarray(np.linalg.lstsq(gram, scaled.T @ target, rcond=1e-10)[0] / scale)
