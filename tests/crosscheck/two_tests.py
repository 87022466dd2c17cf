"""Two tests made by hand: a frequency test and a step test with parameters and uncertainties as one likes."""

from __future__ import annotations

import numpy as np

from freqid.capture.clock_map import ClockMap
from freqid.crosscheck.comparison import cross_check
from freqid.crosscheck.comparison_result import ComparedRow, CrossCheck
from freqid.estimate.model import Adequacy, IdentifiedModel
from freqid.quantity import Quantity, coverage_factor
from freqid.second_order import SecondOrder
from freqid.step_test.step_result import STEP_QUANTITIES, StepResult

TOLERANCE = {"gain": 0.05, "natural_frequency": 0.02, "damping_ratio": 0.10}
VANE = np.array([12.0, 3.0, 0.12, 0.02])
TIGHT = (1e-4, 1e-4, 1e-4, 1e-4)  # relative standard uncertainties
NO_PEAK = "the gain has no peak inside the measured band"
K = coverage_factor()


def clock(*, common: bool = True) -> ClockMap:
    """A minute at 60 frames/s."""
    return ClockMap(
        ratio_ppm=Quantity.normal(0.0, "ppm", 0.0),
        offset_known=common,
        lag=Quantity.normal(0.02, "s", 1e-4),
        lost_frames=0,
        lost_at=np.empty(0),
        frame_interval=1 / 60,
        jitter=0.0,
        frames=3600,
    )


def frequency_test(
    vector: np.ndarray = VANE, relative: tuple[float, ...] = TIGHT, *, common: bool = True, p_value: float = 0.5
) -> IdentifiedModel:
    """An identified model with independent parameters."""
    return IdentifiedModel(
        model=SecondOrder.from_vector(vector),
        covariance=np.diag((np.array(relative) * vector) ** 2),
        degrees_of_freedom=float("inf"),
        angle_unit="deg",
        adequacy=Adequacy(statistic=40.0, degrees_of_freedom=10, p_value=p_value),
        clock=clock(common=common),
        explained=0.999,
    )


def step_test(vector: np.ndarray = VANE, relative: tuple[float, ...] = TIGHT, *, common: bool = True) -> StepResult:
    """A step test with independent parameters and a static gain."""
    quantities: dict[str, Quantity | None] = dict.fromkeys(STEP_QUANTITIES)
    quantities["static_gain"] = Quantity.normal(vector[0], "deg/V", relative[0] * vector[0])
    return StepResult(
        quantities=quantities,
        steps=(),
        model=SecondOrder.from_vector(vector),
        covariance=np.diag((np.array(relative) * vector) ** 2),
        degrees_of_freedom=float("inf"),
        angle_unit="deg",
        clock=clock(common=common),
        explained=0.999,
    )


def checked(first: IdentifiedModel, second: StepResult, **changes: float) -> CrossCheck:
    """Compared with the usual tolerances, or others."""
    return cross_check(first, second, tolerance={**TOLERANCE, **changes}, resonance=NO_PEAK, folder="my folder")


def row(check: CrossCheck, name: str) -> ComparedRow:
    """One row by its name."""
    return next(r for r in check.compared if r.quantity == name)


def moved(name: str, relative: float) -> np.ndarray:
    """The vane with one parameter off."""
    factor = np.ones(4)
    factor[["gain", "natural_frequency", "damping_ratio", "delay"].index(name)] += relative
    return VANE * factor
