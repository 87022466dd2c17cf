"""freqid estimate: clock map, frequency response and model."""

from __future__ import annotations

from pathlib import Path
from typing import Literal

import click

from freqid.cli.options import folder_argument, json_option
from freqid.cli.output import print_caveats, print_json, print_table, progress_bar, quantity_rows
from freqid.cli.recovered import tell_recovered
from freqid.estimate.amplitude_dependence import AmplitudeDependence
from freqid.estimate.distortion_summary import DistortionSummary
from freqid.estimate.identification import Identification
from freqid.estimate.model import IdentifiedModel
from freqid.estimate.result_files import model_as_json
from freqid.quantity import Quantity
from freqid.stages.estimate import estimate_folder
from freqid.test_folder import TestFolder

__all__ = ["command", "print_identification"]


@click.command("estimate")
@folder_argument
@click.option("--run", "run", metavar="NAME|all", help="The run to use, or all; the latest complete one unless given.")
@click.option("--method", type=click.Choice(["auto", "periodic", "local-polynomial"]), default="auto",
              show_default=True, help="How the response is estimated; auto takes periodic where the excitation"
              " is known to repeat.")
@json_option
def command(
    folder: Path, run: str | None, method: Literal["auto", "periodic", "local-polynomial"], as_json: bool
) -> None:  # fmt: skip
    """Estimate clock map, frequency response and second-order model from a run in FOLDER.

    Writes results/response.h5, results/response.csv and results/model.json.

    \b
    Example:
      freqid estimate vane
    """
    test = TestFolder.existing(folder)
    tell_recovered(test)
    with progress_bar() as progress:
        found = estimate_folder(test, run=run, method=method, progress=progress)
    if as_json:
        print_json({"format": "freqid model", "format_version": 1, **model_as_json(found.model)})
    else:
        print_identification(found)
    print_caveats(found.model.caveats)


def print_identification(found: Identification) -> None:
    """Parameters, derived quantities and what was found about the record, as tables."""
    model = found.model
    parameters = dict(model.parameters)
    if not model.clock.offset_known:
        parameters["delay less clock offset"] = parameters.pop("delay")
    print_table(
        quantity_rows(parameters), columns=("model", "value ± 95 %", "unit"), title="Model from the frequency test"
    )
    print_table(quantity_rows(model.derived), columns=("derived from it", "value ± 95 %", "unit"))
    if model.dependence is not None:
        print_table(_trends(model.dependence), columns=("against amplitude", "change ± 95 %", "unit"))
    print_table(_facts(found))


def _trends(dependence: AmplitudeDependence) -> list[tuple[str, str, str]]:
    """Change of each quantity from the smallest to the largest amplitude, in percent."""
    rows = []
    for trend in dependence.trends:
        low, high = trend.change.interval_95
        change, half = Quantity(
            value=100 * trend.change.value, unit="%", standard_uncertainty=100 * trend.change.standard_uncertainty,
            interval_95=(100 * low, 100 * high),
        ).rounded()  # fmt: skip
        sign = "" if change.startswith("-") else "+"
        rows.append((trend.name.replace("_", " "), f"{sign}{change} ± {half}", "%"))
    return rows


def _distortion(one: DistortionSummary) -> str:
    """One kind of distortion around the resonance, in words."""
    if not one.significant:
        return f"{one.kind}: none above the noise (below {100 * one.relative.interval_95[1]:.2g} % of the answer)"
    return f"{one.kind}: {100 * one.relative.value:.2g} % of the answer, {one.excess.value:.2g} times the noise"


def _measured_at(model: IdentifiedModel) -> list[tuple[str, str]]:
    """The amplitude and the distortion, where they are known."""
    rows = []
    if model.amplitude is not None:
        a, unit = model.amplitude, model.angle_unit
        rows.append(("measured at", f"{a.rms_voltage:.3g} V rms, {a.rms_angle:.3g} {unit} rms, {a.peak_angle:.3g} "
                                    f"{unit} to one side"))
    if model.distortion:
        rows.append(("distortion", "; ".join(_distortion(one) for one in model.distortion)))
    return rows  # fmt: skip


def _jitter(jitter: float) -> str:
    """How far the stamps lie off their grid (s), in words; what rounding leaves of whole frames is nothing."""
    return "stamps on their grid" if jitter < 1e-9 else f"stamps off their grid by {1e3 * jitter:.2g} ms rms"


def _facts(found: Identification) -> list[tuple[str, str]]:
    model, clock = found.model, found.model.clock
    response = found.response
    clocks = "one for both logs" if clock.offset_known else f"two; sensor's off by {clock.ratio_ppm}, offset unknown"
    adequacy = model.adequacy
    if adequacy.p_value != adequacy.p_value:
        adequate = "not tested: too few points"
    else:
        word = "describes the response within its noise" if adequacy.adequate else "does NOT describe the response"
        adequate = f"{word} (p = {adequacy.p_value:.2g})"
    return [
        ("runs", ", ".join(model.runs)),
        ("response", f"{len(response.frequency)} points from {response.frequency[0]:.3g} to "
                     f"{response.frequency[-1]:.3g} Hz, {response.method}"),
        ("clocks", clocks),
        ("frames", f"{clock.frames} read, {clock.lost_frames} lost, {_jitter(clock.jitter)}"),
        ("model", f"explains {100 * model.explained:.2f} % of the angle's variance; {adequate}"),
        *_measured_at(model),
    ]  # fmt: skip
