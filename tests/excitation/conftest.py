"""The rig and the limits that the tests of the excitation share."""

from __future__ import annotations

import pytest
from spring_vane import Vane

from excitation import Limits


@pytest.fixture
def vane() -> Vane:
    """12 deg/V, 3 Hz, damping ratio 0.12, no delay."""
    return Vane()


@pytest.fixture
def limits() -> Limits:
    """5 V, 500 V/s, stops at 30 deg, no bias."""
    return Limits(voltage=5.0, slew_rate=500.0, angle=30.0)
