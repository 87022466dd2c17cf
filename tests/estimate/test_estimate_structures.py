"""When a second-order model is not enough: is the right structure named, and none when it is enough?"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

from freqid.estimate.frequency_response import FrequencyResponse
from freqid.estimate.structures import find_better_structure
from freqid.second_order import SecondOrder

VANE = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
FREQUENCY = np.linspace(0.3, 12.0, 80)
NOISE = 0.02  # standard uncertainty of real and imaginary part, deg/V

Complexes = NDArray[np.complex128]


def measured(response: Complexes, seed: int) -> FrequencyResponse:
    """A response with white noise of known variance."""
    rng = np.random.default_rng(seed)
    n = len(FREQUENCY)
    noise = NOISE * (rng.standard_normal(n) + 1j * rng.standard_normal(n))
    return FrequencyResponse(
        frequency=FREQUENCY,
        response=response + noise,
        variance=np.full(n, 2 * NOISE**2),
        coherence=np.ones(n),
        noise=np.full(n, NOISE),
        input_amplitude=np.ones(n),
        degrees_of_freedom=np.full(n, 120.0),
        angle_unit="deg",
        method="periodic",
    )


def mode(f: NDArray[np.float64]) -> Complexes:
    """A second mode at 9 Hz, 2 % of the gain."""
    return SecondOrder(gain=0.24, natural_frequency=9.0, damping_ratio=0.03, delay=0.02).response(f)


@pytest.mark.parametrize(
    ("name", "change", "at"),
    [
        ("extra pole", lambda g, f: g / (1 + 1j * f / 24.0), 24.0),
        ("zero", lambda g, f: g * (1 + 1j * f / 15.0), 15.0),
        ("second mode", lambda g, f: g + mode(f), 9.0),
    ],
)
def test_planted_structure_is_named(name: str, change: Callable[..., Complexes], at: float) -> None:
    """The structure that made the response is found in each of five records, its corner within 10 %."""
    for seed in range(5):
        found = find_better_structure(measured(change(VANE.response(FREQUENCY), FREQUENCY), seed), VANE)
        assert found is not None and found.name == name
        assert found.frequency == pytest.approx(at, rel=0.1)


def test_fewer_parameters_alone_name_nothing() -> None:
    """A second-order model that fits a first-order response as well loses only ln(160) = 5.1 by its one parameter
    more: less than the 10 asked for."""
    response = 12.0 / (1 + 1j * FREQUENCY / 1.5)
    like = SecondOrder(gain=12.0, natural_frequency=20.0, damping_ratio=6.7, delay=0.0)
    assert find_better_structure(measured(response.astype(complex), 1), like) is None


def test_nothing_is_named_where_second_order_is_enough() -> None:
    """Six records of a true second-order rig: one to three parameters more would have to gain 15 to 25 in
    chi-square, which chance does in fewer than one of 5000."""
    named = [find_better_structure(measured(VANE.response(FREQUENCY), seed), VANE) for seed in range(6)]
    assert named == [None] * 6
