"""Were frames lost without a gap in the stamps? Then everything after the loss comes one frame too early.

After m losses a frame with stamp s was taken at s + m * interval. What the fitted rig would have shown there is
computed for every m, and `loss_path` finds the most likely account of the whole record: how many, and where. Then the
stamps are moved, the fit is repeated, and so on until nothing changes. The first fit has taken up most of the losses in
clock ratio and lag, so the search begins at several of both. What a short record leaves the clock ratio free to take
up cannot be found.

The noise counts as it is: the residual is whitened by the autoregression fitted to it, so slow noise is not taken for
wandering time. A loss must gain more than chance gives anywhere in the record (`PRICE` beyond ln N, in natural
logarithms of the likelihood), and must be one whole frame: a free amount fitted to each may not differ from it.
How well an instant can be known depends on how the rig moved: each loss comes with the interval that holds it.

Source: M. Basseville & I. Nikiforov, *Detection of Abrupt Changes*, 1993, ch. 2 (likelihood ratio of a jump at an
unknown instant); `loss_path`.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from freqid.estimate.frame_grid import FrameGrid
from freqid.estimate.loss_path import LossPath, best_account, place_losses
from freqid.estimate.noise_spectrum import autoregression_of
from freqid.estimate.outliers import spikes
from freqid.estimate.prediction import MotionParameters, angle_only
from freqid.estimate.record import Record
from freqid.estimate.record_fit import RecordFit, refine

__all__ = ["SilentLosses", "with_silent_losses"]

Floats = NDArray[np.float64]

PRICE = 4.0  # beyond ln N: where nothing is lost, one record in several hundred exceeds it
SUSPICIOUS = 15.0  # chi-square of the single jump that is worth a search
MOST_LOSSES = 12
MOST_OF_ALL = 96
PASSES = 8
WHOLE_WITHIN, SURELY = 0.4, 4.0  # frames; standard deviations
FARTHEST = 25.0  # squared deviations: a mis-tracked frame counts no more than this
SPIKE = 5.0  # robust standard deviations
LARGEST_RATIO_ERROR = 2e-3
LATEST = 5  # frames by which the first fit's lag may be too early
STARTS = 3
ROUGHLY_WHITE = 1.25


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SilentLosses:
    """Corrected stamps (L,) s of the first frame after each loss, and the stamps (L, 2) s between which each lies with
    95 % probability. A stamp that appears twice stands for two frames lost there.
    """

    at: Floats = field(default_factory=lambda: np.empty(0))
    between: Floats = field(default_factory=lambda: np.empty((0, 2)))

    def joined(self, other: SilentLosses) -> SilentLosses:
        """These and the others, in order of time."""
        at = np.concatenate([self.at, other.at])
        order = np.argsort(at, kind="stable")
        return SilentLosses(at=at[order], between=np.concatenate([self.between, other.between])[order])


def with_silent_losses(record: Record, fit: RecordFit) -> tuple[Record, RecordFit, SilentLosses]:
    """The record with corrected stamps, its fit, and the losses found."""
    nothing = (record, fit, SilentLosses())
    if 3 not in fit.prediction.free or _largest_jump(record, fit) < SUSPICIOUS:
        return nothing
    states, path, again = MOST_LOSSES, None, fit
    while states <= MOST_OF_ALL:
        path, again = _likeliest(record, fit, states)
        path, again = _without_first(record, again, path)
        if path is None or path.count < states:
            break
        states *= 2
    if path is None or path.count == 0 or path.count >= states or not _believable(record, fit, again, path):
        return nothing
    moved = _moved(record, path)
    ends = np.clip(path.interval, 1, len(moved.stamp) - 1)
    between = np.stack([moved.stamp[ends[:, 0] - 1], moved.stamp[ends[:, 1]]], axis=1)
    return moved, again, SilentLosses(at=moved.stamp[path.boundary], between=between)


def _moved(record: Record, path: LossPath) -> Record:
    shift = np.searchsorted(path.boundary, np.arange(len(record.stamp)), side="right") * record.frame_interval
    return record.with_stamps(record.stamp + shift)


def _price(record: Record) -> float:
    return float(np.log(len(record.stamp))) + PRICE


def _likelihoods(record: Record, p: MotionParameters, states: int, noise: _Noise) -> Floats:
    """Log-likelihood (states + 1, N) of each frame after so many losses."""
    shown = [
        angle_only(record.with_stamps(record.stamp + m * record.frame_interval), p) for m in range(states + 1)
    ]
    return -0.5 * np.minimum(noise.whitened(record.angle - np.array(shown)), FARTHEST)


@dataclass(frozen=True, slots=True, eq=False)
class _Noise:
    """Autoregression of the noise, its innovations' variance, and the slots of the frames."""

    grid: FrameGrid
    polynomial: Floats
    variance: float

    @classmethod
    def white(cls, residual: Floats, grid: FrameGrid) -> _Noise:
        """White, as loud as the middle of the residual (a bell curve's median absolute deviation is 0.6745 s.d.)."""
        scale = float(np.median(np.abs(residual - np.median(residual)))) / 0.6745
        return cls(grid, np.ones(1), max(scale**2, 1e-12 * float(np.var(residual)), 1e-300))

    @classmethod
    def coloured(cls, residual: Floats, grid: FrameGrid) -> _Noise:
        """As coloured as the residual."""
        usual = np.where(spikes(residual, farthest=SPIKE), 0.0, residual)
        first = cls(grid, autoregression_of(grid.filled(usual)), 1.0)
        innovation = first.whitened(residual[None, :])[0]
        return replace(first, variance=max(float(np.median(innovation)) / 0.6745**2, 1e-300))

    def whitened(self, residual: Floats) -> Floats:
        """Squared innovations over their variance, (S, N) of residuals (S, N)."""
        if len(self.polynomial) == 1:
            return np.asarray(residual**2 / self.variance)
        from scipy.signal import lfilter

        slots = np.arange(self.grid.size)
        filled = np.array([np.interp(slots, self.grid.slot, one) for one in residual])
        innovation = lfilter(self.polynomial, [1.0], filled, axis=1)[:, self.grid.slot]
        return np.asarray(innovation**2 / self.variance)


def _starts(record: Record, fit: RecordFit, states: int) -> list[RecordFit]:
    """The fit with the few clock ratios and lags from which losses explain the record best.

    A lag of whole frames more is a number of losses less, so all lags of one ratio share their computation.
    """
    p, frame = fit.parameters, record.frame_interval
    span, begin = float(record.stamp[-1] - record.stamp[0]), float(record.stamp[0])
    noise = _Noise.white(fit.residual, FrameGrid.from_stamps(record.stamp))
    ratios = [p.clock_ratio]
    if 4 in fit.prediction.free:
        slower = (p.clock_ratio - j * frame / span for j in range(1, states + 1))
        ratios += [r for r in slower if r > 1 - LARGEST_RATIO_ERROR]
    trials = []
    for ratio in ratios:
        # the latest lag first: so many frames later than fitted
        turned = (ratio - p.clock_ratio) * begin
        likelihood = _likelihoods(record, _started(p, ratio, turned + LATEST * frame), states + LATEST, noise)
        for earlier in range(LATEST + 1):
            _, gained = best_account(likelihood[earlier : earlier + states + 1], price=_price(record))
            score = gained + float(np.sum(likelihood[earlier]))
            trials.append((score, _started(p, ratio, turned + (LATEST - earlier) * frame)))
    trials.sort(key=lambda trial: -trial[0])
    return [replace(fit, parameters=start) for _, start in trials[:STARTS]]


def _likeliest(record: Record, fit: RecordFit, states: int) -> tuple[LossPath | None, RecordFit]:
    """Losses and fit from the best of several starts; where much is left, from fits to thirds of the record as well."""
    starts = _starts(record, fit, states)
    ends = [_settled(record, start, states, colours=(False,), passes=3) for start in starts]
    if all(path is None or _misfits(again) for path, again in ends):
        starts = [start for third in _thirds(record, fit) for start in _starts(record, third, states)]
        ends += [_settled(record, start, states, colours=(False,), passes=3) for start in starts]
    usable = [(path, again) for path, again in ends if path is not None]
    if not usable:
        return None, fit
    grid = FrameGrid.from_stamps(record.stamp)
    noise = min((_Noise.white(again.residual, grid) for _, again in usable), key=lambda one: one.variance)

    def cost(end: tuple[LossPath, RecordFit]) -> float:
        squares = np.minimum(noise.whitened(end[1].residual[None, :]), FARTHEST)
        return 0.5 * float(np.sum(squares)) + end[0].count * _price(record)

    best = min(usable, key=cost)[1]
    return _settled(record, best, states, colours=(False, True), passes=PASSES)


def _misfits(fit: RecordFit) -> bool:
    """Whether the residual is clearly larger than its second differences (white noise: sqrt(6) of it)."""
    rough = float(np.median(np.abs(np.diff(fit.residual, 2)))) / np.sqrt(6)
    return bool(np.median(np.abs(fit.residual)) > ROUGHLY_WHITE * rough)


def _thirds(record: Record, fit: RecordFit) -> list[RecordFit]:
    """Fits to the three thirds of the record, each of which holds fewer losses."""
    number = 3 * np.arange(len(record.stamp)) // len(record.stamp)
    found = [refine(record.keep(number == third), fit.parameters) for third in range(3)]
    return [replace(fit, parameters=one.parameters) for one in found if one is not None]


def _started(p: MotionParameters, ratio: float, later: float) -> MotionParameters:
    return replace(p, clock_ratio=ratio, model=replace(p.model, delay=p.model.delay + later))


def _settled(
    record: Record, fit: RecordFit, states: int, *, colours: tuple[bool, ...], passes: int
) -> tuple[LossPath | None, RecordFit]:
    """Losses and fit in turn until neither changes; white noise first, then the noise as coloured as it is."""
    grid = FrameGrid.from_stamps(record.stamp)
    path, current = None, fit
    for colour in colours:
        for _turn in range(passes):
            if colour:
                noise = _Noise.coloured(current.residual, grid)
            elif path is None:
                noise = _Noise.white(record.angle - angle_only(record, current.parameters), grid)
            else:
                noise = _Noise.white(current.residual, grid)
            likelihood = _likelihoods(record, current.parameters, states, noise)
            count, _ = best_account(likelihood, price=_price(record))
            found = place_losses(likelihood, count)
            same = path is not None and np.array_equal(found.boundary, path.boundary)
            path = found
            if same:
                break
            again = refine(_moved(record, path), current.parameters)
            if again is None:
                return None, fit
            current = again
    return path, current


def _without_first(
    record: Record, fit: RecordFit, path: LossPath | None
) -> tuple[LossPath | None, RecordFit]:
    """Leave out first losses that a change of the lag explains as well: before the first motion they are the same."""
    while path is not None and path.count:
        fewer = LossPath(boundary=path.boundary[1:], interval=path.interval[1:])
        start = _started(fit.parameters, fit.parameters.clock_ratio, -record.frame_interval)
        trial = refine(_moved(record, fewer), start)
        noise = _Noise.white(fit.residual, FrameGrid.from_stamps(record.stamp))
        if trial is None:
            break
        worse = noise.whitened(trial.residual[None, :]) - noise.whitened(fit.residual[None, :])
        if 0.5 * float(np.sum(worse)) > _price(record):
            break
        path, fit = fewer, trial
    return path, fit


def _believable(record: Record, fit: RecordFit, again: RecordFit, path: LossPath) -> bool:
    """Whether the losses gain their price over the fit without them, and are whole frames."""
    noise = _Noise.coloured(again.residual, FrameGrid.from_stamps(record.stamp))
    before, after = (np.sum(np.minimum(noise.whitened(r.residual[None, :]), FARTHEST)) for r in (fit, again))
    if 0.5 * float(before - after) < path.count * _price(record):
        return False
    later = _later(_moved(record, path), again)
    columns = [np.where(np.arange(len(later)) >= k, later, 0.0) for k in np.unique(path.boundary)]
    design = np.column_stack([again.prediction.jacobian, *columns])
    scale = np.maximum(np.linalg.norm(design, axis=0), 1e-300)
    amount, *_ = np.linalg.lstsq(design / scale, again.residual, rcond=1e-9)
    inverse = np.linalg.pinv((design / scale).T @ (design / scale), rcond=1e-9)
    level = again.sum_of_squares / max(len(later) - design.shape[1], 1)
    new = slice(again.prediction.jacobian.shape[1], None)
    extra = np.abs(amount / scale)[new]
    deviation = (np.sqrt(np.maximum(np.diag(inverse), 0) * level) / scale)[new]
    return bool(np.mean((extra > WHOLE_WITHIN) & (extra > SURELY * deviation)) < 0.5)


def _later(record: Record, fit: RecordFit) -> Floats:
    """How the angle (N,) changes where the frames come one interval later; the derivative by the lag is -K rate."""
    lag = fit.prediction.jacobian[:, fit.prediction.free.index(3)]
    return np.asarray(-lag * fit.parameters.clock_ratio * record.frame_interval)


def _largest_jump(record: Record, fit: RecordFit) -> float:
    """Chi-square gained by the best single jump of at least a fifth of a frame, all fitted parameters projected out."""
    jacobian = fit.prediction.jacobian
    later = _later(record, fit)
    basis, _ = np.linalg.qr(jacobian / np.maximum(np.linalg.norm(jacobian, axis=0), 1e-300))
    # a single mis-tracked frame must not look like a loss
    residual = np.where(spikes(fit.residual, farthest=SPIKE), 0.0, fit.residual)
    residual = residual - basis @ (basis.T @ residual)

    def from_here_on(values: Floats) -> Floats:
        return np.asarray(np.cumsum(values[::-1], axis=0)[::-1])

    projected = from_here_on(basis * later[:, None])
    size = from_here_on(later**2) - np.sum(projected**2, axis=1)
    match = from_here_on(later * residual)
    usable = size > 1e-6 * float(np.max(size))
    amount = np.where(usable, match / np.where(usable, size, 1.0), 0.0)
    gained = float(np.max(np.where(usable & (amount > 0.2), match * amount, 0.0)))
    rest = (float(residual @ residual) - gained) / max(len(residual) - basis.shape[1] - 1, 1)
    return float(gained / max(rest, 1e-300))
