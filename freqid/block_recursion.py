"""What is the state of a linear system at any sample of its input, when most samples are never asked for?

    x[m + 1] = A x[m] + B v[m],    x[0] = 0,    v[m] the rows of the input

Blocks of samples are taken at once: what a block adds is one matrix product, the state at the beginning of every block
is the same recursion over fewer, longer steps (so it is solved by calling itself), and a state inside a block is worked
out only where it is asked for. The result is that of the plain loop to rounding; powers of A stand in for its products.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

__all__ = ["BlockRecursion"]

Floats = NDArray[np.float64]
BLOCK = 16  # samples
FEW = 64  # steps that a plain loop takes as fast
_LAST = np.tri(BLOCK, k=-1)[:, ::-1]  # row r: which of the BLOCK samples before are the r last


class BlockRecursion:
    """States (n,) of x[m + 1] = A x[m] + sum of gain_k input_k[m] from rest; build once, ask at many samples.

    Parameters: `transition` A (n, n); `inputs`, each (M,); `gains`, one column (n,) of B for each input.
    """

    def __init__(self, transition: Floats, inputs: Sequence[Floats], gains: Sequence[Floats]) -> None:
        powers = _powers(transition, BLOCK)
        self._powers = np.stack(powers)
        # row i of a block reaches the block's end through BLOCK - 1 - i further steps
        self._reach = [np.stack([power @ gain for power in powers[BLOCK - 1 :: -1]]) for gain in gains]
        padded = [np.concatenate([np.zeros(BLOCK), values, np.zeros(-len(values) % BLOCK)]) for values in inputs]
        # row m: the BLOCK samples before sample m
        self._windows = [np.lib.stride_tricks.sliding_window_view(values, BLOCK) for values in padded]
        added = [windows[BLOCK::BLOCK] @ reach for windows, reach in zip(self._windows, self._reach, strict=True)]
        self._begin = _block_states(np.sum(added, axis=0), powers[BLOCK])

    def at(self, index: NDArray[np.intp]) -> Floats:
        """States (N, n) before the inputs of the samples `index` (N,) act."""
        block, offset = np.divmod(index, BLOCK)
        states = np.einsum("mij,mj->mi", self._powers[offset], self._begin[block])
        within = _LAST[offset]
        for windows, reach in zip(self._windows, self._reach, strict=True):
            states += (windows[index] * within) @ reach
        return np.asarray(states)


def _powers(transition: Floats, count: int) -> list[Floats]:
    """A^0 to A^count."""
    powers = [np.eye(len(transition))]
    for _ in range(count):
        powers.append(powers[-1] @ transition)
    return powers


def _in_blocks(values: Floats) -> Floats:
    """Values (M, ...) as rows of one block each, the last filled with zeros."""
    missing = -len(values) % BLOCK
    if missing:
        values = np.concatenate([values, np.zeros((missing, *values.shape[1:]))])
    return values.reshape(-1, BLOCK, *values.shape[1:])


def _block_states(added: Floats, transition: Floats) -> Floats:
    """States (M, n) before each of M steps that add the rows of `added` (M, n), from rest."""
    count, n = added.shape
    if count <= FEW:
        states = np.zeros((count, n))
        for step in range(count - 1):
            states[step + 1] = transition @ states[step] + added[step]
        return states
    powers = _powers(transition, BLOCK)
    blocks = _in_blocks(added).reshape(-1, BLOCK * n)
    reach = np.concatenate([power.T for power in powers[BLOCK - 1 :: -1]])
    begin = _block_states(blocks @ reach, powers[BLOCK])
    # inside: step j sees row i < j through A^(j - 1 - i)
    inside = np.zeros((BLOCK, n, BLOCK, n))
    for row in range(BLOCK):
        for step in range(row + 1, BLOCK):
            inside[row, :, step, :] = powers[step - 1 - row].T
    carried = np.stack([power.T for power in powers[:BLOCK]], axis=1)
    states = blocks @ inside.reshape(BLOCK * n, -1) + begin @ carried.reshape(n, -1)
    return states.reshape(-1, n)[:count]
