"""Is the account of the losses the most likely one, and is its uncertainty the one that all accounts together give?"""

from __future__ import annotations

from itertools import combinations_with_replacement

import numpy as np
import pytest

from freqid.estimate.loss_path import best_account, place_losses

FRAMES, STATES = 9, 3


def likelihoods(seed: int) -> np.ndarray:
    """Random log-likelihoods of nine frames after 0 to 3 losses."""
    return 3 * np.random.default_rng(seed).standard_normal((STATES + 1, FRAMES))


def accounts(count: int) -> list[tuple[int, ...]]:
    """Every way to place so many losses at the boundaries inside the record."""
    return list(combinations_with_replacement(range(1, FRAMES), count))


def score(likelihood: np.ndarray, account: tuple[int, ...]) -> float:
    """Log-likelihood of one account."""
    state = np.searchsorted(np.array(account), np.arange(FRAMES), side="right")
    return float(np.sum(likelihood[state, np.arange(FRAMES)]))


@pytest.mark.parametrize("seed", range(6))
def test_the_best_account_is_the_best_of_all(seed: int) -> None:
    """Brute force over all 165 accounts of up to three losses, each loss at its price."""
    likelihood, price = likelihoods(seed), 2.5
    best = [max(score(likelihood, a) for a in accounts(m)) - m * price for m in range(STATES + 1)]
    count, gained = best_account(likelihood, price=price)
    assert count == int(np.argmax(best))
    assert gained == pytest.approx(max(best) - best[0], abs=1e-12)


@pytest.mark.parametrize("count", [0, 1, 2, 3])
@pytest.mark.parametrize("seed", range(4))
def test_places_are_quantiles_of_all_accounts(seed: int, count: int) -> None:
    """Brute force: each loss lies at the 2.5, 50 and 97.5 % points of the likelihood summed over all accounts."""
    likelihood = likelihoods(seed)
    found = place_losses(likelihood, count)
    assert found.count == count
    weight = np.exp([score(likelihood, a) for a in accounts(count)])
    middles = []
    for m in range(count):
        share = np.cumsum(np.bincount([a[m] for a in accounts(count)], weights=weight, minlength=FRAMES + 1))
        low, middle, high = np.searchsorted(share, np.array([0.025, 0.5, 0.975]) * share[-1])
        assert list(found.interval[m]) == [low, high]
        middles.append(middle)
    assert list(found.boundary) == middles


def test_frames_that_tell_nothing_leave_the_loss_anywhere_among_them() -> None:
    """Frames 3 to 6 fit both numbers alike: the loss lies between boundaries 3 and 7, five equally likely ones."""
    likelihood = np.zeros((2, FRAMES))
    likelihood[1, :3] = likelihood[0, 7:] = -50.0
    found = place_losses(likelihood, 1)
    assert list(found.interval[0]) == [3, 7]
    assert found.boundary[0] == 5


def test_nothing_is_bought_above_its_worth() -> None:
    """A loss that gains 3 is taken at a price of 2.9 and left at 3.1."""
    likelihood = np.zeros((2, FRAMES))
    likelihood[0, 5] = -3.0
    assert best_account(likelihood, price=2.9) == (1, pytest.approx(0.1))
    assert best_account(likelihood, price=3.1) == (0, 0.0)
