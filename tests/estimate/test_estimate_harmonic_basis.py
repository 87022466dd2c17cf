"""Products of harmonic columns against the columns written out, on a grid and off it."""

from __future__ import annotations

import numpy as np
import pytest

from freqid.estimate.harmonic_basis import HarmonicBasis


def basis(count: int, seed: int, *, jittered: bool) -> HarmonicBasis:
    """Two periods at `count` instants, seven lines, rest and drift."""
    rng = np.random.default_rng(seed)
    time = 2 * np.arange(count) / count + (rng.uniform(-0.3, 0.3, count) / count if jittered else 0.0)
    return HarmonicBasis(
        turn=np.exp(2j * np.pi * time),
        orders=np.array([1, 2, 3, 5, 8, 13, 21]),
        further=np.stack([np.ones(count), time - 1], axis=1),
    )


@pytest.mark.parametrize("jittered", [False, True])
def test_products_are_those_of_the_columns_written_out(jittered: bool) -> None:
    """Brute force: sums of 200 terms of order one in another order differ by some 200 roundings: 1e-11."""
    made = basis(200, 1, jittered=jittered)
    columns, values = made.columns, np.random.default_rng(2).standard_normal(200)
    coefficients = np.arange(1.0, 17.0)
    np.testing.assert_allclose(made.gram(), columns.T @ columns, atol=1e-11)
    np.testing.assert_allclose(made.project(values), columns.T @ values, atol=1e-11)
    np.testing.assert_allclose(made.combined(coefficients), columns @ coefficients, atol=1e-10)
    assert made.shape == columns.shape


@pytest.mark.parametrize("jittered", [False, True])
def test_the_inverse_inverts(jittered: bool) -> None:
    """By blocks where the lines are orthogonal, in one piece where not; the ridge of 1e-12 is all that is left over."""
    made = basis(200, 3, jittered=jittered)
    np.testing.assert_allclose(made.inverse_gram() @ made.gram(), np.eye(16), atol=1e-9)


def test_a_line_more_needs_its_order_only() -> None:
    """The instants and the further columns stay."""
    more = basis(200, 4, jittered=True).with_orders(np.array([1, 4]))
    assert more.shape == (200, 6)
    np.testing.assert_allclose(more.columns[:, 1], np.real(more.turn**4), atol=1e-12)
