"""Are powers and phases that are sought together better than either alone, and is the gradient right?"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from spring_vane import Vane

from excitation.crest_factor import largest_peak, lower_peak, schroeder_phases
from excitation.information_criterion import WEIGHT, LineInformation
from excitation.joint_descent import PeakLimits, _Task, lower_jointly
from excitation.power_allocation import informative_amplitudes

HARMONICS = np.array([3, 5, 7, 11, 13, 15, 17, 21, 23, 25, 29, 31, 33, 35, 39, 41])
LINES = HARMONICS / 5.0


def _limits(rigs: list[Vane], *, voltage: float, angle: float) -> PeakLimits:
    signals = [rig.response(LINES) / angle for rig in rigs] + [np.full(LINES.size, 1 / voltage, dtype=complex)]
    return PeakLimits(signals=np.array(signals), harmonics=HARMONICS)


@pytest.mark.parametrize(("voltage", "angle"), [(1.0, 200.0), (5.0, 30.0)])
def test_better_than_the_powers_first_and_the_phases_then(vane: Vane, voltage: float, angle: float) -> None:
    """Starting from powers and phases that were chosen one after the other, both together tell more."""
    rigs = [vane, replace(vane, natural_frequency=3.15), replace(vane, damping_ratio=0.096)]
    information, limits = LineInformation(LINES, rigs), _limits(rigs, voltage=voltage, angle=angle)
    amplitudes = informative_amplitudes(information, costs=np.abs(limits.signals) ** 2, rounds=20)
    phases = lower_peak(schroeder_phases(amplitudes), harmonics=HARMONICS, signals=amplitudes * limits.signals)
    apart = amplitudes * np.exp(1j * phases)
    apart = apart / largest_peak(apart * limits.signals, HARMONICS, 1024)
    together = lower_jointly(apart, limits=limits, information=information)
    gained = information.criterion(np.abs(apart) ** 2) - information.criterion(np.abs(together) ** 2)
    assert gained > 0.05  # of logarithms of variances: at least 2.5 % of the uncertainty


def test_largest_peak_meets_its_limit_and_every_line_lives(vane: Vane) -> None:
    """The drive is scaled to the limits between the points of its own grid too, and keeps a share on each line."""
    limits = _limits([vane], voltage=5.0, angle=30.0)
    lines = lower_jointly(np.ones(LINES.size, dtype=complex), limits=limits, information=LineInformation(LINES, [vane]))
    # 10 points or more per period of the highest line miss at most 1 - cos(pi / 10) = 4.9 % of the peak
    assert 1 - 1e-9 < largest_peak(lines * limits.signals, HARMONICS, 1 << 15) < 1 / np.cos(np.pi / 10)
    shares = np.abs(lines) ** 2 * np.max(np.abs(limits.signals) ** 2, axis=0)
    assert np.min(shares) >= 0.04 / LINES.size * np.sum(shares) * (1 - 1e-9)


def test_gradient_against_differences(vane: Vane) -> None:
    """Central differences of 1e-5 in every variable agree; their error is of the order 1e-10 times p^2."""
    task = _Task(_limits([vane], voltage=1.0, angle=30.0), LineInformation(LINES, [vane]))
    rng = np.random.default_rng(3)
    variables = np.concatenate([rng.normal(size=LINES.size), rng.uniform(0, 6, LINES.size)])
    gradient = task.objective(variables, 8, 512)[1]
    for index, step in enumerate(1e-5 * np.eye(variables.size)):
        high, low = (task.objective(variables + side * step, 8, 512)[0] for side in (1, -1))
        assert gradient[index] == pytest.approx((high - low) / 2e-5, abs=1e-6)


def test_criterion_counts_power_as_its_weight_says(vane: Vane) -> None:
    """Variances go with the inverse of the power, so twice the power lowers the criterion by the weight times ln 2."""
    information = LineInformation(LINES, [vane])
    power = np.linspace(1, 2, LINES.size)
    assert information.criterion(power) - information.criterion(2 * power) == pytest.approx(WEIGHT * np.log(2))
    value, slope = information.criterion_and_slope(power)
    assert value == pytest.approx(information.criterion(power), rel=1e-12)
    assert slope @ power == pytest.approx(-WEIGHT, rel=1e-9)  # Euler, for a logarithm of a homogeneous function


def test_criterion_is_the_variance_of_a_fit(vane: Vane) -> None:
    """For one rig the criterion is that of the inverse of the information matrix, summed line by line."""
    information, power = LineInformation(LINES, [vane]), np.linspace(1, 2, LINES.size)
    dependence = vane.sensitivity(LINES)
    matrix = sum(p * np.real(np.outer(row, row.conj())) for p, row in zip(power, dependence, strict=True))
    variances = np.diag(np.linalg.inv(matrix))
    norm = np.sum(np.abs(dependence) ** 2, axis=0)  # the criterion knows each parameter in its own unit
    expected = np.log(variances[2] * norm[2]) + 0.2 * np.log(variances[1] * norm[1])
    assert information.criterion(power) == pytest.approx(float(expected), rel=1e-9)
