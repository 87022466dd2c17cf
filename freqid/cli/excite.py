"""freqid excite: design the voltage profile, and say what it will do and how well it will measure."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import click

from freqid.cli.cautions import print_cautions
from freqid.cli.options import FiniteRange, folder_argument, json_option
from freqid.cli.output import print_caveats, print_json, print_table, progress_bar, quantity_rows
from freqid.stages.excite import Design, ExciteSettings, design_excitation
from freqid.test_folder import TestFolder

if TYPE_CHECKING:
    from excitation.multisine_layout import Grid
    from excitation.sweep_rate import Course

__all__ = ["command"]

_ABOVE_ZERO = FiniteRange(min=0, min_open=True)


@click.command("excite")
@folder_argument
@click.option("--kind", type=click.Choice(["multisine", "swept-sine", "step"]), default="multisine", show_default=True,
              help="Many frequencies at once and periodic, one after the other, or steps for the step test.")
@click.option("--band", type=(_ABOVE_ZERO, _ABOVE_ZERO), metavar="LOW HIGH",
              help="Frequencies to cover, Hz; about the natural frequency of [step_test] unless given.")
@click.option("--duration", type=_ABOVE_ZERO, metavar="S", help="Length of the profile, s; chosen unless given.")
@click.option("--wanted-damping", type=FiniteRange(0, 1, min_open=True), metavar="REL",
              help="Uncertainty wanted for the damping ratio, relative, at 95 % (0.05 is 5 %): the test is made as"
                   " long as it takes, at most --duration.")
@click.option("--amplitude", type=_ABOVE_ZERO, metavar="V",
              help="Peak voltage from the bias; refused where it would pass a limit. The largest safe one unless "
                   "given.")
@click.option("--grid", type=click.Choice(["odd-gapped", "odd", "full"]), default="odd-gapped", show_default=True,
              help="Lines of a multisine: odd multiples of 1/period with random gaps, so that even and odd distortion"
                   " can be seen; all odd ones; all.")
@click.option("--course", type=click.Choice(["exponential", "linear"]), default="exponential", show_default=True,
              help="How the frequency of a swept sine runs.")
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Of the random phases.")
@click.option("--from-model", is_flag=True, help="Plan from results/model.json in place of [step_test].")
@json_option
def command(
    folder: Path,
    kind: Literal["multisine", "swept-sine", "step"],
    band: tuple[float, float] | None,
    duration: float | None,
    wanted_damping: float | None,
    amplitude: float | None,
    grid: Grid,
    course: Course,
    seed: int,
    from_model: bool,
    as_json: bool,
) -> None:  # fmt: skip
    """Design the voltage for FOLDER within the limits of its rig.toml: profile.*, or step_profile.* for --kind step.

    The amplitude is the largest at which voltage, slew rate and predicted swing stay within their limits for
    every rig the step test allows. The files .h5, .csv and .wav hold the same samples.

    \b
    Examples:
      freqid excite vane
      freqid excite vane --kind step
    """
    if kind == "step" and band is not None:
        raise click.UsageError("--band has no meaning for --kind step; leave it out")
    _refuse_meaningless(kind)
    test = TestFolder.existing(folder)
    settings = ExciteSettings(
        kind=kind, band=band, duration=duration, wanted_damping=wanted_damping, amplitude=amplitude, seed=seed,
        from_model=from_model, grid=grid, course=course,
    )  # fmt: skip
    with progress_bar() as progress:
        design = design_excitation(test, settings, progress=progress)
    if as_json:
        print_json(_as_json(test, design))
    else:
        print_table(_profile_rows(test, design))
        print_table(quantity_rows(design.prediction.expected), columns=("to be measured", "at best, 95 %", "unit"))
    print_caveats(design.prediction.caveats)
    print_cautions()


def _refuse_meaningless(kind: str) -> None:
    """Refuse an option that was given but means nothing for this kind."""
    given = click.get_current_context().get_parameter_source
    for option, its_kind in (("grid", "multisine"), ("course", "swept-sine")):
        if kind != its_kind and given(option) is not click.core.ParameterSource.DEFAULT:
            raise click.UsageError(f"--{option} has no meaning for --kind {kind}; leave it out")


def _profile_rows(folder: TestFolder, design: Design) -> list[tuple[str, str]]:
    profile, prediction = design.profile, design.prediction
    unit = prediction.angle_unit
    swing = "not predicted" if prediction.swing is None else f"{prediction.swing:.3g} {unit}"
    rows = [
        ("profile", f"{profile.kind}, {profile.duration:g} s at {profile.sample_rate:g} Hz, {profile.hold}"),
        ("voltage", f"±{profile.peak_voltage:.4g} V about {profile.bias:g} V, rms {profile.rms:.3g} V, crest factor"
                    f" {profile.crest_factor:.3g}, limited by the {_limited_by(design)}"),
        ("slew rate", f"{profile.max_slew_rate:.4g} V/s"),
        ("worst swing", f"{swing} of {prediction.allowed_swing:.3g} {unit} allowed, stops at ±{prediction.stops:g}"
                        f" {unit}"),
        ("files", ", ".join(folder.relative_name(file) for file in design.files)),
    ]  # fmt: skip
    if design.card is not None:
        rows.append(("figure", folder.relative_name(design.card)))
    if profile.band is not None:
        rows.insert(1, ("band", f"{profile.band[0]:g} to {profile.band[1]:g} Hz{_periods(design)}"))
    return rows


def _periods(design: Design) -> str:
    profile = design.profile
    if profile.period_samples is None:
        return ""
    period = profile.period_samples / profile.sample_rate
    even, odd = (lines.size for lines in profile.detection_lines)
    free = f", {even} even and {odd} odd ones left free to show distortion" if even or odd else ""
    return f", {profile.lines.size} lines{free}, {profile.n_periods} periods of {period:.4g} s"


def _limited_by(design: Design) -> str:
    if design.prediction.swing is None and design.profile.settings.get("amplitude_limited_by") == "amplitude asked for":
        return "unknown swing"
    return str(design.profile.settings.get("amplitude_limited_by", "design"))


def _as_json(folder: TestFolder, design: Design) -> dict[str, Any]:
    profile = design.profile
    return {
        "kind": profile.kind,
        "figure": None if design.card is None else folder.relative_name(design.card),
        "files": [folder.relative_name(file) for file in design.files],
        "duration": profile.duration,
        "sample_rate": profile.sample_rate,
        "band": profile.band,
        "n_lines": profile.lines.size,
        "n_detection_lines": dict(zip(("even", "odd"), (f.size for f in profile.detection_lines), strict=True)),
        "period": profile.period_samples / profile.sample_rate if profile.period_samples else None,
        "n_periods": profile.n_periods,
        "peak_voltage": profile.peak_voltage,
        "rms_voltage": profile.rms,
        "max_slew_rate": profile.max_slew_rate,
        "limited_by": _limited_by(design),
        "seed": profile.seed,
        "prediction": design.prediction.as_json(),
    }
