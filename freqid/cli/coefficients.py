"""freqid coefficients: the model for a controller."""

from __future__ import annotations

from pathlib import Path

import click

from freqid.cli.options import FiniteRange, folder_argument, json_option
from freqid.cli.output import print_caveats, print_json, print_table
from freqid.stages.coefficients import Test, coefficients_of_folder
from freqid.test_folder import TestFolder

__all__ = ["command"]


@click.command("coefficients")
@folder_argument
@click.option("--controller-rate", type=FiniteRange(min=0, min_open=True), metavar="HZ",
              help="Rate of the controller: adds the exact discrete form behind a zero-order hold.")
@click.option("--delay", type=FiniteRange(min=0), metavar="S",
              help="The rig's delay, where it is known better than the test knows it.")
@click.option("--test", type=click.Choice(["frequency", "step"]), default="frequency", show_default=True,
              help="Whose model.")
@json_option
def command(
    folder: Path, controller_rate: float | None, delay: float | None, test: Test, as_json: bool
) -> None:  # fmt: skip
    """Print the transfer function of FOLDER's model: continuous, and discrete at the rate of a controller.

    Writes results/coefficients.json and results/coefficients.csv; the measured frequency response stands in
    results/response.csv.

    \b
    Example:
      freqid coefficients vane --controller-rate 200 --delay 0.02
    """
    found = coefficients_of_folder(
        TestFolder.existing(folder), test=test, controller_rate=controller_rate, delay=delay
    )
    if as_json:
        print_json({"format": "freqid coefficients", "format_version": 1, **found.as_json()})
    else:
        rows = [(part, power, f"{q.value:.10g}", f"{q.standard_uncertainty:.2g}") for part, power, q in found.rows()]
        rows.append(("delay", "s", f"{found.delay:.6g}", ""))
        print_table(rows, columns=("part", "power", f"value ({found.angle_unit}, V, s)", "standard uncertainty"))
    print_caveats(found.caveats)
