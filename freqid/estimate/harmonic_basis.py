"""How do cosines and sines of one period's harmonics overlap, over instants that are on no grid?

Columns are cos(2 pi k t / T) and -sin(2 pi k t / T) for each order k, then any further columns. Their products are sums
of exp(j 2 pi m t / T) over the instants, with m the sums and differences of two orders: a vector, not a matrix, has to
be summed, so even hundreds of lines over a long record cost little. The coefficients a, b of a pair belong to the
complex amplitude a + j b of Re (a + j b) exp(j 2 pi k t / T).

Source: sine fitting with known frequencies, IEEE Std 1241; products of cosines by the addition theorems.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["HarmonicBasis"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
ORTHOGONAL = 1e-10  # relative product below which two lines are taken as orthogonal
CHUNK = 8192  # instants at a time: their powers stay close to the processor
RIDGE = 1e-12  # of the unit diagonal: keeps two columns that coincide from ending in an error


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class HarmonicBasis:
    """`turn` (S,) is exp(j 2 pi t / T) at the instants, `orders` (F,) whole numbers, `further` (S, Q) more columns."""

    turn: Complexes
    orders: NDArray[np.intp]
    further: Floats

    @property
    def shape(self) -> tuple[int, int]:
        """Instants and columns."""
        return len(self.turn), 2 * len(self.orders) + self.further.shape[1]

    @property
    def columns(self) -> Floats:
        """All columns written out (S, 2 F + Q)."""
        turning = self.turn[:, None] ** self.orders
        return np.concatenate([turning.real, -turning.imag, self.further], axis=1)

    def with_orders(self, orders: NDArray[np.intp]) -> HarmonicBasis:
        """The same instants and further columns with other lines."""
        return HarmonicBasis(turn=self.turn, orders=orders, further=self.further)

    def project(self, values: Floats) -> Floats:
        """Products (2 F + Q, ...) of the columns with `values` (S,) or (S, W)."""
        sums = self._sums(values, int(self.orders.max()))[self.orders]
        return np.concatenate([sums.real, -sums.imag, self.further.T @ values])

    def combined(self, coefficients: Floats) -> Floats:
        """Sum (S,) of the columns times `coefficients` (2 F + Q,)."""
        count = len(self.orders)
        dense = np.zeros(int(self.orders.max()) + 1, dtype=complex)
        dense[self.orders] = coefficients[:count] + 1j * coefficients[count : 2 * count]
        total = np.zeros(len(self.turn), dtype=complex)
        for amplitude in dense[::-1]:  # Horner's rule
            total *= self.turn
            total += amplitude
        return np.asarray(total.real + self.further @ coefficients[2 * count :])

    def inverse_gram(self) -> Floats:
        """Inverse (P, P) of columns' columns, P = 2 F + Q."""
        gram = self.gram()
        scale = np.sqrt(np.diag(gram))
        scaled = gram / np.outer(scale, scale) + RIDGE * np.eye(len(gram))
        return np.asarray(_inverse(scaled, 2 * len(self.orders)) / np.outer(scale, scale))

    def gram(self) -> Floats:
        """Products (P, P) of all columns with each other."""
        k = self.orders
        sums = self._sums(np.ones(len(self.turn)), 2 * int(k.max()))
        difference, total = k[:, None] - k, k[:, None] + k
        apart = sums[np.abs(difference)]
        sine_apart = np.sign(difference) * apart.imag
        cosines = (apart.real + sums[total].real) / 2
        sines = (apart.real - sums[total].real) / 2
        crossed = (sine_apart - sums[total].imag) / 2
        coupled = self.project(self.further)
        lines = np.block([[cosines, crossed], [crossed.T, sines]])
        beside = coupled[: len(lines)]
        return np.block([[lines, beside], [beside.T, coupled[len(lines) :]]])

    def _sums(self, values: Floats, highest: int) -> Complexes:
        """Sums (highest + 1, ...) of values times the powers 0, 1, ... of `turn`.

        Power b n + a is power a times power b of the n-th, so of all powers only some 2 sqrt(highest) are worked out.
        """
        n = math.isqrt(highest) + 1
        sums = np.zeros((*values.shape[1:], n * n), dtype=complex)
        for begin in range(0, len(self.turn), CHUNK):
            turn = self.turn[begin : begin + CHUNK]
            small = _powers(turn, n)
            large = _powers(small[-1] * turn, n)
            weighted = values[begin : begin + CHUNK].T[..., None, :] * large
            sums += (weighted @ small.T).reshape(sums.shape)
        return np.asarray(np.moveaxis(sums[..., : highest + 1], -1, 0))


def _powers(turn: Complexes, count: int) -> Complexes:
    """Powers 0 to count - 1 of each value, (count, S)."""
    powers = np.empty((count, len(turn)), dtype=complex)
    powers[0] = 1.0
    for order in range(1, count):
        np.multiply(powers[order - 1], turn, out=powers[order])
    return powers


def _inverse(scaled: Floats, lines: int) -> Floats:
    """Inverse of a matrix of unit diagonal; where its first `lines` columns are orthogonal, by blocks."""
    block = scaled[:lines, :lines]
    diagonal = np.diag(block)
    if np.max(np.abs(block - np.diag(diagonal))) > ORTHOGONAL:
        return _symmetric_inverse(scaled)
    beside = scaled[:lines, lines:] / diagonal[:, None]
    rest = np.linalg.inv(scaled[lines:, lines:] - scaled[lines:, :lines] @ beside)
    corner = beside @ rest
    return np.block([[corner @ beside.T + np.diag(1 / diagonal), -corner], [-corner.T, rest]])


def _symmetric_inverse(matrix: Floats) -> Floats:
    """Inverse of a positive definite matrix through its Cholesky factor, in half the time of a general one."""
    from scipy.linalg.lapack import dpotrf, dpotri

    factor, failed = dpotrf(matrix, lower=1)
    if failed:
        return np.asarray(np.linalg.inv(matrix), dtype=float)
    lower, _ = dpotri(factor, lower=1)
    lower = np.tril(lower)
    return np.asarray(lower + np.tril(lower, -1).T)
