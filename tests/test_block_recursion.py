"""States asked for out of order, across blocks of blocks, equal the plain loop."""

from __future__ import annotations

import numpy as np
import pytest

from freqid.block_recursion import BlockRecursion


@pytest.mark.parametrize("count", [1, 2, 15, 16, 17, 1000, 20_001])
def test_states_equal_the_plain_loop(count: int) -> None:
    """Two inputs, four states of a decaying rotation: to 1e-12 of the largest.

    Each of some 1 / (1 - 0.995) = 200 steps that the state remembers rounds to 1e-16: 2e-14, and head-room.
    """
    rng = np.random.default_rng(count)
    transition = np.linalg.qr(rng.standard_normal((4, 4)))[0] * 0.995
    gains = list(rng.standard_normal((2, 4)))
    inputs = list(rng.standard_normal((2, count)))
    expected = np.zeros((count, 4))
    for m in range(count - 1):
        added = gains[0] * inputs[0][m] + gains[1] * inputs[1][m]
        expected[m + 1] = transition @ expected[m] + added
    index = rng.permutation(count)
    got = BlockRecursion(transition, inputs, gains).at(index)
    np.testing.assert_allclose(got, expected[index], rtol=0, atol=1e-12 * np.max(np.abs(expected), initial=1.0))


def test_single_input_and_repeated_questions() -> None:
    """x[m + 1] = x[m] / 2 + v[m] with v = 1: the geometric sum 2 - 2^(1 - m), asked twice for the same sample."""
    recursion = BlockRecursion(np.array([[0.5]]), [np.ones(40)], [np.ones(1)])
    index = np.array([0, 1, 39, 39, 16])
    np.testing.assert_allclose(recursion.at(index)[:, 0], 2 - 2.0 ** (1 - index), rtol=1e-15)
