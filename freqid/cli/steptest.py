"""freqid steptest: step-test values and step model."""

from __future__ import annotations

from pathlib import Path

import click

from freqid.cli.options import folder_argument, json_option
from freqid.cli.output import print_caveats, print_json, print_table, progress_bar, quantity_rows
from freqid.cli.recovered import tell_recovered
from freqid.stages.steptest import step_test_folder
from freqid.step_test.result_file import step_as_json
from freqid.step_test.step_result import StepResult
from freqid.test_folder import TestFolder

__all__ = ["command", "print_step_result"]

_SWINGS = {
    "viscous": "viscous damping shows, dry friction does not",
    "dry friction": "dry friction shows, viscous damping does not",
    "viscous and dry friction": "viscous damping and dry friction show",
    "undecided": "neither viscous damping nor dry friction shows",
}


@click.command("steptest")
@folder_argument
@click.option("--run", "run", metavar="NAME", help="The step run to use; the latest complete one unless given.")
@json_option
def command(folder: Path, run: str | None, as_json: bool) -> None:
    """Read overshoot, times and static gain off every step of a step run in FOLDER, and fit its model.

    Times count from the onset of the response. Writes results/step.json.

    \b
    Example:
      freqid steptest vane
    """
    test = TestFolder.existing(folder)
    tell_recovered(test)
    with progress_bar() as progress:
        result = step_test_folder(test, run=run, progress=progress)
    if as_json:
        print_json({"format": "freqid step test", "format_version": 1, **step_as_json(result)})
    else:
        print_step_result(result)
    print_caveats(result.caveats)


def print_step_result(result: StepResult) -> None:
    """Fitted parameters, and the read-offs beside what the fit implies."""
    parameters = dict(result.parameters)
    if not result.clock.offset_known:
        parameters["delay less clock offset"] = parameters.pop("delay")
    print_table(
        quantity_rows(parameters), columns=("model", "value ± 95 %", "unit"), title="Model from the step test"
    )
    read, derived = dict(quantity_rows_by_name(result.quantities)), dict(quantity_rows_by_name(result.derived))
    rows = [(name, *read[name], derived.get(name, ("", ""))[0]) for name in read]
    counted = f"{len(result.steps)} step{'s' if len(result.steps) > 1 else ''}"
    up = sum(step.direction == "up" for step in result.steps)
    print_table(
        rows,
        columns=(f"{counted}, {up} up", "read off ± 95 %", "unit", "fit implies"),
    )
    _print_groups(result)
    for line in _friction_lines(result):
        click.echo(line)


def _print_groups(result: StepResult) -> None:
    """Steps up beside steps down, and each size beside the others where there are several."""
    groups = [*result.by_direction, *(result.by_amplitude if len(result.by_amplitude) > 1 else ())]
    shown = ("gain", "natural_frequency", "damping_ratio")
    rows = []
    for group in groups:
        numbers = [" ± ".join(q.rounded()) if (q := group.parameters.get(name)) is not None else "" for name in shown]
        rows.append((f"{group.group}, {group.n_steps}", *numbers))
    if len(rows) > 1:
        print_table(rows, columns=("steps", *(name.replace("_", " ") for name in shown)))


def _friction_lines(result: StepResult) -> list[str]:
    lines = []
    if result.decay is not None:
        d = result.decay
        lines.append(f"Swings: {_SWINGS[d.kind]} (damping ratio {d.damping_ratio}, "
                     f"dry friction worth {d.friction_angle})")  # fmt: skip
    if result.static_line is not None and result.static_line.hysteresis is not None:
        lines.append(f"Levels: hysteresis between up and down {result.static_line.hysteresis}")
    return lines


def quantity_rows_by_name(quantities: dict) -> list[tuple[str, tuple[str, str]]]:  # type: ignore[type-arg]
    """Rows of `quantity_rows` keyed by their name."""
    return [(name, (value, unit)) for name, value, unit in quantity_rows(quantities)]
