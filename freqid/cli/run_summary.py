"""What is said of a run that has just been recorded or brought in?"""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

import numpy as np

from freqid.cli.output import print_json, print_table, say
from freqid.records import Run
from freqid.test_folder import TestFolder

__all__ = ["print_run", "run_as_json"]


def print_run(folder: TestFolder, run: Run, *, as_json: bool) -> None:
    """The run as a table (its notes on stderr), or everything as JSON."""
    if as_json:
        print_json(run_as_json(folder, run))
        return
    print_table(_rows(folder, run))
    for note in run.notes:
        say(f"note: {note}")


def run_as_json(folder: TestFolder, run: Run) -> dict[str, Any]:
    """Everything but the samples, for scripts."""
    periodicity = run.input.periodicity
    return {
        "run": run.name,
        "kind": run.kind,
        "file": folder.relative_name(folder.run(run.name)),
        "sha256": run.file_sha256,
        "input": {
            "samples": run.input.time.size,
            "duration": _span(run.input.time),
            "hold": run.input.hold,
            "commanded": run.input.commanded,
            "period": periodicity.period if periodicity else None,
            "periods": periodicity.n_periods if periodicity else None,
        },
        "angle": {
            "samples": run.angle.time.size,
            "duration": _span(run.angle.time),
            "unreadable": _unreadable(run),
            "unit": run.angle.angle_unit,
        },
        "common_clock": run.common_clock,
        "complete": run.complete,
        "simulated": run.simulated,
        "origins": [asdict(origin) for origin in run.origins],
        "notes": list(run.notes),
    }


def _rows(folder: TestFolder, run: Run) -> list[tuple[str, str]]:
    voltage, angle = run.input, run.angle
    source = "as sent" if voltage.commanded else "measured"
    unit = angle.angle_unit
    rows = [
        ("run", f"{run.name}{', simulated' if run.simulated else ''}{'' if run.complete else ', ended early'}"),
        ("file", folder.relative_name(folder.run(run.name))),
        ("voltage", f"{voltage.time.size} samples in {_span(voltage.time):.2f} s, {source}, {voltage.hold}, "
                    f"{np.nanmin(voltage.voltage):.3g} to {np.nanmax(voltage.voltage):.3g} V"),
        ("angle", f"{angle.time.size} frames in {_span(angle.time):.2f} s, {_unreadable(run)} unreadable, "
                  f"{np.nanmin(angle.angle):.3g} to {np.nanmax(angle.angle):.3g} {unit}"),
        ("clocks", "one for both" if run.common_clock else "two, offset unknown"),
    ]  # fmt: skip
    if (periodicity := voltage.periodicity) is not None:
        rows.insert(3, ("periodic", f"{periodicity.n_periods} periods of {periodicity.period:.4g} s, "
                                    f"{periodicity.lines.size} lines"))  # fmt: skip
    return rows


def _span(time: np.ndarray) -> float:
    return float(time[-1] - time[0])


def _unreadable(run: Run) -> int:
    return int(np.count_nonzero(np.isnan(run.angle.angle)))
