"""How does a step-test result get into results/step.json and back?"""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from freqid.capture.clock_map import ClockMap
from freqid.derived import undefined_reasons
from freqid.errors import TestFolderError
from freqid.quantity import Caveat, Quantity
from freqid.second_order import PARAMETER_ORDER, SecondOrder
from freqid.step_test.envelope import Decay, Extremes
from freqid.step_test.static_line import StaticLine
from freqid.step_test.step_result import StepReading, StepResult

if TYPE_CHECKING:
    from freqid.test_folder import TestFolder

__all__ = ["STEP_FORMAT", "read_step_result", "step_as_json", "write_step_result"]

STEP_FORMAT = "freqid step test"


def write_step_result(folder: TestFolder, result: StepResult, *, computed_from: Iterable[Path]) -> None:
    """Write results/step.json, whole or not at all."""
    content = folder.provenance(format=STEP_FORMAT, computed_from=computed_from)
    folder.write_json(folder.step, {**content, **step_as_json(result)})


def step_as_json(result: StepResult) -> dict[str, Any]:
    """The body of results/step.json; what is undetermined is null, with a warning that says why."""

    def plain(quantities: dict[str, Quantity | None]) -> dict[str, Any]:
        return {name: None if q is None else q.as_json() for name, q in quantities.items()}

    parameters = plain(result.parameters)
    if parameters["delay"] is not None:
        parameters["delay"]["includes_clock_offset"] = not result.clock.offset_known
    reasons = undefined_reasons(result.model.vector, result.covariance, degrees_of_freedom=result.degrees_of_freedom)
    return {
        "angle_unit": result.angle_unit,
        "quantities": plain(result.quantities),
        "parameters": parameters,
        "parameter_order": list(PARAMETER_ORDER),
        "model": list(result.model.vector),
        "covariance": result.covariance,
        "degrees_of_freedom": result.degrees_of_freedom,
        "derived": plain(result.derived),
        "steps": [step.as_json() for step in result.steps],
        "groups": [group.as_json() for group in (*result.by_direction, *result.by_amplitude)],
        "decay": None if result.decay is None else result.decay.as_json(),
        "static_line": None if result.static_line is None else result.static_line.as_json(),
        "clock": result.clock.as_json(),
        "explained": result.explained,
        "undetermined": list(result.undetermined),
        "runs": list(result.runs),
        "warnings": [c.as_json() for c in (*result.caveats, *reasons)],
    }


def read_step_result(folder: TestFolder) -> StepResult:
    """The step test in results/step.json; raises TestFolderError where it is missing, damaged or newer."""
    content = folder.read_json(folder.step, format=STEP_FORMAT)
    try:
        return _result(content)
    except (KeyError, TypeError, ValueError) as error:
        raise TestFolderError(f"{folder.step}: damaged ({error!r}); run `freqid steptest {folder.quoted}` "
                              f"again") from None


def _result(content: dict[str, Any]) -> StepResult:
    def back(rows: dict[str, Any]) -> dict[str, Quantity | None]:
        return {name: Quantity.from_json(q) for name, q in rows.items()}

    return StepResult(
        quantities=back(content["quantities"]),
        steps=tuple(
            StepReading(
                time=row["time"],
                voltage_before=row["voltage_before"],
                voltage_after=row["voltage_after"],
                quantities=back(row["quantities"]),
                level=Quantity.from_json(row.get("level")),
                extremes=None if row.get("extremes") is None else Extremes.from_json(row["extremes"]),
                parameters=back(row.get("parameters", {})),
            )
            for row in content["steps"]
        ),
        model=SecondOrder.from_vector(content["model"]),
        covariance=np.array(content["covariance"], dtype=float).reshape(4, 4),
        degrees_of_freedom=content["degrees_of_freedom"],
        angle_unit=content["angle_unit"],
        clock=ClockMap.from_json(content["clock"]),
        explained=content["explained"],
        undetermined=tuple(content["undetermined"]),
        caveats=Caveat.all_from_json(content["warnings"]),
        runs=tuple(content["runs"]),
        decay=Decay.from_json(content.get("decay")),
        static_line=StaticLine.from_json(content.get("static_line")),
    )
