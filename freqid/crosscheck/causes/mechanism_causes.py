"""Which of the tried mechanisms are named as causes, how strongly, and what stands for and against each?

Named is the mechanism with the highest score, if it reaches `NAMED`; beside it those that cannot be told apart from it
(score lower by less than 10, Kass & Raftery's "very strong") and, weaker, those that explain more than half as much.
One that merely contains the first (all three numbers free, where one suffices) is not repeated.

    strength = score over that of the best  *  (1 - exp(- score / 20)),        halved where the best refutes it
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from freqid.crosscheck.causes.exhibits import exhibit_for
from freqid.crosscheck.causes.mechanism_trials import NAMED, Trial, Trials, try_mechanisms
from freqid.crosscheck.causes.mechanism_words import MechanismWords, words_for
from freqid.crosscheck.causes.recorded_tests import prepared_tests
from freqid.crosscheck.comparison_result import Cause
from freqid.crosscheck.evidence import Evidence

__all__ = ["RecordCauses", "causes_from_records"]

VERY_STRONG = 10.0
WORTH_NAMING = 0.5  # of the best rise
SURE = 20.0
MOST_NAMED = 3
CONTAINED = {"operating_point": ("scale_error", "time_scale", "damping_differs")}


@dataclass(frozen=True, slots=True, kw_only=True)
class RecordCauses:
    """Causes for which the raw records speak, strongest first, and whether silent losses are believed beside them."""

    causes: tuple[Cause, ...] = ()
    silent_losses: bool = True


def causes_from_records(evidence: Evidence) -> RecordCauses:
    """Causes for which the raw records speak; none where no record is at hand.

    Silent losses that an estimate found are one more explanation of the same misfit: they are believed where a healthy
    rig with them explains more than any mechanism without them.
    """
    tests = prepared_tests(evidence)
    if not tests or evidence.gains_are_opposite:
        return RecordCauses()
    trials, believed = try_mechanisms(tests), True
    losses = len(evidence.model.clock.silently_lost_at) + len(evidence.step.clock.silently_lost_at)
    if losses:
        without = try_mechanisms(prepared_tests(evidence, with_losses=False))
        best = without.found[0].score if without.found else 0.0
        if _score_of_losses(losses, trials, without) < best:
            trials, believed = without, False
    named = _named(trials)
    return RecordCauses(
        causes=tuple(_cause(trial, named, trials, evidence) for trial in named), silent_losses=believed
    )


def _score_of_losses(losses: int, trials: Trials, without: Trials) -> float:
    """Rise by putting the losses back, less the price of an instant for each (and of a whole frame's shift)."""
    rise = trials.healthy.log_likelihood - without.healthy.log_likelihood
    return rise - losses * math.log(trials.n_frames)


def _named(trials: Trials) -> list[Trial]:
    candidates = [trial for trial in trials.found if trial.score >= NAMED]
    if not candidates:
        return []
    best = candidates[0]
    contains_best = [code for code, parts in CONTAINED.items() if best.mechanism.code in parts]
    kept = [best]
    for trial in candidates[1:]:
        rival = best.score - trial.score < VERY_STRONG or trial.rise > WORTH_NAMING * best.rise
        if rival and trial.mechanism.code not in contains_best and not _same_cause(trial, kept):
            kept.append(trial)
    return kept[:MOST_NAMED]


def _same_cause(trial: Trial, kept: list[Trial]) -> bool:
    unequal = {"unequal_spring", "unequal_gain"}
    return any({trial.mechanism.code, other.mechanism.code} <= unequal for other in kept)


def _cause(trial: Trial, named: list[Trial], trials: Trials, evidence: Evidence) -> Cause:
    best = named[0]
    unit = evidence.model.angle_unit
    all_words = [words_for(other, trials, angle_unit=unit, folder=evidence.folder) for other in named]
    words = all_words[named.index(trial)]
    ahead = best.score - trial.score
    part = 0.5 if ahead >= VERY_STRONG else 1.0
    strength = part * trial.score / best.score * (1 - math.exp(-trial.score / SURE))
    rivals = [
        others_words
        for other, others_words in zip(named, all_words, strict=True)
        if other is not trial and abs(other.score - trial.score) < VERY_STRONG
    ]
    return Cause(
        cause=words.code,
        strength=float(np.clip(strength, 0.01, 0.99)),
        evidence=f"{words.finding}. {_what_it_explains(trial, trials, unit)}",
        against=_against(words, rivals, trial, all_words[0], ahead=ahead),
        exhibit=exhibit_for(trial, trials, evidence),
        settling_test=words.settling_test,
    )


def _what_it_explains(trial: Trial, trials: Trials, unit: str) -> str:
    parts = []
    for test, before, after in zip(trials.tests, trials.healthy.residuals, trial.fit.residuals, strict=True):
        first, second = (float(np.sqrt(np.mean(r**2))) for r in (before, after))
        alone = [other.kind for other in trials.tests].count(test.kind) == 1
        called = f"the {test.words}" if alone else test.name
        parts.append(f"in {called} from {first:.3g} to {second:.3g} {unit}")
    return (
        f"With it the rms that one rig leaves over falls {' and '.join(parts)} (twice the log likelihood rises by"
        f" {trial.rise:.3g})."
    )


def _against(
    words: MechanismWords, rivals: list[MechanismWords], trial: Trial, best: MechanismWords, *, ahead: float
) -> str:
    said = [words.doubt] if words.doubt else []
    if ahead >= VERY_STRONG:
        said.append(f"{_plain(best).capitalize()} explains more (score higher by {ahead:.3g}).")
    for rival in rivals:
        said.append(f"These records do not tell it from {_plain(rival)}: see the settling test.")
    share = trial.fit.effective_share
    if share < 0.6:
        said.append("What it leaves over still hangs together from frame to frame: it is not the whole story.")
    return " ".join(said)


def _plain(words: MechanismWords) -> str:
    return words.code.replace("_", " ")
