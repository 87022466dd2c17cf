"""Does a profile say of its own samples what is true, and refuse what cannot be one?"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from excitation import ExcitationError, Profile

GOOD: dict[str, Any] = {"voltage": [1.0, 3.0, 1.0, -1.0, 1.0, 3.0, 1.0, -1.0, 1.0], "sample_rate": 4.0}
GOOD |= {"hold": "zero-order", "bias": 1.0, "kind": "multisine"}
PERIODIC = {"period_samples": 4, "steady_start": 0, "steady_stop": 8, "lines": [1.0]}


def test_figures_of_a_profile_computed_by_hand() -> None:
    """Two periods of 0, 2, 0, -2 V about 1 V, four samples a second."""
    profile = Profile(**GOOD, **PERIODIC)
    assert profile.peak_voltage == 2.0
    assert profile.rms == pytest.approx(math.sqrt(2), rel=1e-15)
    assert profile.crest_factor == pytest.approx(math.sqrt(2), rel=1e-15)
    assert profile.max_slew_rate == 8.0
    assert profile.duration == 2.25
    assert profile.n_periods == 2
    assert profile.time[-1] == 2.0


def test_change_from_and_to_the_bias_counts() -> None:
    """A voltage that starts off the bias changes from it, and back to it at the end."""
    profile = Profile(voltage=[2.0, 2.0], sample_rate=10.0, hold="smooth", bias=0.0, kind="other")
    np.testing.assert_array_equal(profile.changes, [2.0, 0.0, -2.0])
    assert profile.max_slew_rate == 20.0


def test_crest_factor_of_rest_is_undetermined() -> None:
    """A profile that never leaves its bias has no crest factor."""
    assert math.isnan(Profile(voltage=[1.0, 1.0], sample_rate=1.0, hold="smooth", bias=1.0, kind="other").crest_factor)


def test_samples_cannot_be_changed() -> None:
    """Neither the samples nor the settings of a profile can be written, nor reached through the array handed in."""
    voltage = np.zeros(3)
    profile = Profile(**{**GOOD, "voltage": voltage})
    voltage[0] = 9.0
    assert profile.voltage[0] == 0.0
    with pytest.raises(ValueError, match="read-only"):
        profile.voltage[0] = 1.0
    with pytest.raises(TypeError):
        profile.settings["x"] = 1  # type: ignore[index]


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"voltage": [1.0]}, "at least 2 samples"),
        ({"voltage": np.zeros((2, 2))}, r"shape \(2, 2\)"),
        ({"voltage": [0.0, np.nan, 0.0]}, "sample 1 is nan"),
        ({"sample_rate": 0.0}, "sample_rate: 0.0 Hz"),
        ({"sample_rate": math.inf}, "sample_rate: inf Hz"),
        ({"bias": math.nan}, "bias: nan V"),
        ({"hold": "linear"}, "hold: 'linear'"),
        ({"kind": "noise"}, "kind: 'noise'"),
        ({"steady_stop": 10}, "outside the 9 samples"),
        ({"steady_stop": 7}, "not a whole number of periods of 4"),
        ({"steady_stop": 0}, "not a whole number of periods of 4"),
        ({"period_samples": 1}, "not a whole number of periods of 1"),
    ],
)
def test_what_cannot_be_a_profile_is_refused(change: dict[str, Any], message: str) -> None:
    """Each impossible field is named with its value."""
    with pytest.raises(ExcitationError, match=message):
        Profile(**{**GOOD, **PERIODIC, **change})
