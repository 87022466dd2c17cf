"""Does the allocated power tell more than a flat spectrum, and keep every line alive?"""

from __future__ import annotations

import numpy as np
import pytest
from spring_vane import Vane

from excitation.information_criterion import LineInformation
from excitation.power_allocation import informative_amplitudes

LINES = np.linspace(0.2, 12.0, 60)


def _costs(vane: Vane, voltage: float, angle: float) -> np.ndarray:
    return np.array([np.full(LINES.size, 1 / voltage**2), np.abs(vane.response(LINES) / angle) ** 2])


@pytest.mark.parametrize(("voltage", "angle"), [(1.0, 200.0), (5.0, 30.0)])
def test_tells_at_least_as_much_as_flat_power_at_the_same_limits(vane: Vane, voltage: float, angle: float) -> None:
    """Within the flat part's cost the criterion never rises; where only the voltage limits it falls by far."""
    costs = _costs(vane, voltage, angle)
    flat = np.ones(LINES.size) / np.sqrt(np.max(costs @ np.ones(LINES.size)))
    designed = informative_amplitudes(LineInformation(LINES, [vane]), costs=costs, rounds=20)
    information = LineInformation(LINES, [vane])
    gained = information.criterion(flat**2) - information.criterion(designed**2)
    assert gained > -1.2 * 0.06  # weights 1 + 0.2 times the flat part of the power
    if angle == 200.0:
        assert gained > 1.0


def test_most_costly_signal_is_used_up_and_no_more(vane: Vane) -> None:
    """Both parts of the power meet the limits, so their mixture does; a flat part on every line remains."""
    costs = _costs(vane, 1.0, 200.0)
    designed = informative_amplitudes(LineInformation(LINES, [vane]), costs=costs, rounds=20)
    # voltage binds for both parts: their costs add to 1 up to rounding of sums of 60 terms
    assert np.max(costs @ designed**2) == pytest.approx(1.0, rel=1e-12)
    assert np.min(designed**2) >= 0.06 / LINES.size * (1 - 1e-12)


def test_no_rounds_leave_the_flat_spectrum(vane: Vane) -> None:
    """The algorithm starts from equal powers."""
    designed = informative_amplitudes(LineInformation(LINES, [vane]), costs=_costs(vane, 1.0, 200.0), rounds=0)
    np.testing.assert_allclose(designed, designed[0], rtol=1e-12)
