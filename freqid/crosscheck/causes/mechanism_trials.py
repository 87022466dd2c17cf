"""Which faults explain what one healthy rig leaves unexplained? Every mechanism tried on all records at once.

A first-order look at each mechanism sorts out those that cannot help; the others are fitted. A mechanism's score is
the rise of twice the log likelihood over the healthy rig, less ln n for each of its numbers (Schwarz), the frames
counted as independent as neighbouring residuals of the best fit say. 10 is "very strong" evidence (Kass & Raftery);
`NAMED` asks for a little more, as many mechanisms are tried.

Source: G. Schwarz, Ann. Statist. 6 (1978) 461-464; R. Kass & A. Raftery, JASA 90 (1995) 773-795.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from freqid.crosscheck.causes.mechanisms import HEALTHY, Mechanism, mechanisms_for
from freqid.crosscheck.causes.recorded_tests import RecordedTest
from freqid.crosscheck.causes.shared_fit import JointFit, SharedRig
from freqid.errors import CaptureError

__all__ = ["NAMED", "Trial", "Trials", "try_mechanisms"]

Floats = NDArray[np.float64]
NAMED = 14.0  # score
KINDS = ("response", "step")
EACH_ITS_OWN = "operating_point"
WORTH_FITTING = 6.0
SHARE_WORTH_FITTING = 0.25  # of the best first-order rise
MOST_FITTED = 6
PASSES = 10
STARTS, TRIAL_PASSES = 3, 3
POLISHING = 5
POLISHED = 2  # fits that get slopes of their own: the best, and the next where its residuals still hang together
JUMPS = (0.75, 0.82, 0.88, 0.93, 0.97, 1.03, 1.08, 1.14, 1.22, 1.33)
SETTLED = 0.97  # independent values per frame, beyond which no jump is tried
WELL_FITTED = 0.8  # independent values per frame


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Trial:
    """One mechanism fitted: its joint fit, rise of twice the log likelihood, and score."""

    mechanism: Mechanism
    fit: JointFit
    rise: float
    score: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Trials:
    """The healthy rig's fit and those of the mechanisms, best first."""

    tests: tuple[RecordedTest, ...]
    healthy: JointFit
    found: tuple[Trial, ...]
    n_frames: int


def try_mechanisms(tests: tuple[RecordedTest, ...]) -> Trials:
    """Fit the healthy rig and every mechanism that may explain more."""
    rig = SharedRig(tests)
    healthy, state = rig.fit(HEALTHY, np.empty(0))
    tried = [m for m in mechanisms_for(tests) if m.code != EACH_ITS_OWN or len(tests) > len(KINDS)]
    looks = [(mechanism, _first_look(rig, mechanism, state, healthy)) for mechanism in tried]
    looks = sorted((look for look in looks if look[1]), key=lambda look: -look[1][0].rise)
    best = looks[0][1][0].rise if looks else 0.0
    promising = [look for look in looks if look[1][0].rise > max(WORTH_FITTING, SHARE_WORTH_FITTING * best)]
    fits = [(m, *_fitted(rig, m, found, state)) for m, found in promising[:MOST_FITTED]]
    fits.sort(key=lambda fitted: -fitted[1].log_likelihood)
    for i, (mechanism, fit, end) in enumerate(fits[:POLISHED]):
        is_first = i == 0 and fit.log_likelihood - healthy.log_likelihood > 2 * NAMED
        if is_first or fit.effective_share < WELL_FITTED:
            fits[i] = mechanism, *_polished(rig, mechanism, fit, end)
    fits += _each_its_own(tests, state)
    share = max((fit for _, fit, _ in fits), key=lambda f: f.log_likelihood, default=healthy).effective_share
    trials = []
    for mechanism, fit, _ in fits:
        rise = (fit.log_likelihood - healthy.log_likelihood) * share
        penalty = len(fit.numbers) * float(np.log(rig.n_frames * share))
        trials.append(Trial(mechanism=mechanism, fit=fit, rise=rise, score=rise - penalty))
    trials.sort(key=lambda trial: -trial.score)
    return Trials(tests=tests, healthy=healthy, found=tuple(trials), n_frames=rig.n_frames)


def _polished(rig: SharedRig, mechanism: Mechanism, fit: JointFit, end: Floats) -> tuple[JointFit, Floats]:
    """The fit with slopes of its own; a single number first jumps where that helps.

    Where a rig sticks, or whether it touches a stop once more, changes by jumps, and a descent ends at the nearest.
    """
    trials = [(fit, end)]
    if len(fit.numbers) == 1 and fit.effective_share < SETTLED:
        looks = []
        for factor in JUMPS:
            numbers = mechanism.bounded(fit.numbers * factor)
            try:
                looks.append((rig.first_order(replace(mechanism, looked_at=0), numbers, end)[0], numbers))
            except (CaptureError, np.linalg.LinAlgError):
                continue
        for _, numbers in sorted(looks, key=lambda look: look[0])[:STARTS]:
            trials.append(rig.fit(mechanism, numbers, state=end, passes=TRIAL_PASSES))
    best, state = max(trials, key=lambda trial: trial[0].log_likelihood)
    return rig.fit(mechanism, best.numbers, state=state, passes=POLISHING, own_slopes=True)


def _each_its_own(tests: tuple[RecordedTest, ...], state: Floats) -> list[tuple[Mechanism, JointFit, Floats]]:
    """A rig of its own for each of two tests: these fits exist already."""
    if tuple(test.kind for test in tests) != KINDS:
        return []
    (mechanism,) = (m for m in mechanisms_for(tests) if m.code == EACH_ITS_OWN)
    first, second = (test.fit.parameters.vector[:3] for test in tests)
    if first[0] * second[0] <= 0:
        return []
    deviations = [test.relative_uncertainty for test in tests]
    fit = JointFit(
        parameters=tuple(test.fit.parameters for test in tests),
        numbers=np.log(second / first),
        uncertainty=np.hypot(*deviations),
        residuals=tuple(test.fit.residual for test in tests),
    )
    return [(mechanism, fit, state)]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Look:
    """First-order rise from one start, and the numbers it leads to."""

    rise: float
    numbers: Floats


def _fitted(rig: SharedRig, mechanism: Mechanism, looks: list[_Look], state: Floats) -> tuple[JointFit, Floats]:
    """The best fit; where the start is a choice, a few passes from each of the best starts, then on from the best."""
    if mechanism.looked_at or len(looks) == 1:
        return rig.fit(mechanism, looks[0].numbers, state=state, passes=PASSES)
    trials = [rig.fit(mechanism, look.numbers, state=state, passes=TRIAL_PASSES) for look in looks[:STARTS]]
    fit, end = max(trials, key=lambda trial: trial[0].log_likelihood)
    return rig.fit(mechanism, fit.numbers, state=end, passes=PASSES)


def _first_look(rig: SharedRig, mechanism: Mechanism, state: Floats, healthy: JointFit) -> list[_Look]:
    """First-order rises over the mechanism's starts, best first."""
    found: list[_Look] = []
    known = np.concatenate(healthy.residuals) if mechanism.neutral else None
    for start in mechanism.starts:
        try:
            objective, numbers = rig.first_order(mechanism, np.array(start), state, known)
        except (CaptureError, np.linalg.LinAlgError):
            continue
        found.append(_Look(rise=-objective - healthy.log_likelihood, numbers=numbers))
    return sorted(found, key=lambda look: -look.rise)
