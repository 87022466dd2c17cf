"""Does every profile that `excite` exports obey the limits of its rig, or is the design refused with a figure?

Random rig sheets: limits, rates, holds, biases, priors (damping ratio 0.01 to 1.5) and their uncertainties, bands,
durations, kinds.
Each is designed as the command does it and the exported CSV read back. No sample may pass the voltage limit, no two
neighbours the slew limit (the onset from the bias and the return to it included), and the exact motion between the
samples (`freqid.held_response`), through the ring-down, must stay inside the stops for the corners and the centre of
the prior box. A refusal must be a message of this program with a figure in it. Nothing else may happen.

    python tests/benchmarks/safe_profiles.py [--sheets 2000] [--seed 1] [--workers 1]
"""

from __future__ import annotations

import argparse
import itertools
import math
import re
import sys
import tempfile
from collections import Counter
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from excitation.errors import ExcitationError
from freqid.errors import FreqidError
from freqid.held_response import Drive, HeldResponse
from freqid.rig import Rig, read_rig
from freqid.stages.excite import ExciteSettings, design_excitation
from freqid.test_folder import TestFolder

__all__ = ["Outcome", "outcome_of_sheet"]

Kind = Literal["multisine", "swept-sine", "step"]
KINDS: tuple[Kind, ...] = ("multisine", "swept-sine", "step")
RATES = (50, 100, 200, 250)  # Hz
POINTS_PER_PERIOD = 80  # of the fastest thing in sight: a peak is missed by at most 1 - cos(pi / 80) = 0.08 %
ROUNDING = 1e-9  # relative: voltages are written to the last digit, and their differences lose a few
SHEET = """
[rig]
name = "a rig"
angle_unit = "deg"
[limits]
voltage = {voltage!r}
slew_rate = {slew_rate!r}
angle = {angle!r}
bias = {bias!r}
[output]
sample_rate = {rate}
hold = "{hold}"
full_scale = {full_scale!r}
[angle_sensor]
sample_rate = {sensor_rate!r}
exposure = 0.0
stamp = "end"
noise = 0.1
[step_test]
gain = {gain!r}
natural_frequency = {natural_frequency!r}
damping_ratio = {damping_ratio!r}
delay = {delay!r}
gain_uncertainty = {gain_uncertainty!r}
natural_frequency_uncertainty = {natural_frequency_uncertainty!r}
damping_ratio_uncertainty = {damping_ratio_uncertainty!r}
"""


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What became of one sheet: shares of the limits used (0 where refused), the refusal, the violations in words."""

    kind: Kind
    voltage_share: float = 0.0
    slew_share: float = 0.0
    swing_share: float = 0.0
    refusal: str | None = None
    violations: tuple[str, ...] = ()


def outcome_of_sheet(folder: Path, rng: np.random.Generator) -> Outcome:
    """Write a random sheet into `folder`, design, and look at what was exported."""
    test = TestFolder(folder)
    test.rig.write_text(_sheet(rng), encoding="utf-8")
    rig = read_rig(test.rig)
    settings = _settings(rig, rng)
    try:
        design_excitation(test, settings, draw=False)
    except (ExcitationError, FreqidError) as error:
        left = [file.name for file in test.path.iterdir() if file.name.startswith(("profile", "step_profile"))]
        said = str(error)
        violations = [f"left behind: {', '.join(left)}"] if left else []
        violations += [] if re.search(r"\d", said) else [f"refused without a figure: {said}"]
        return Outcome(kind=settings.kind, refusal=said, violations=tuple(violations))
    except Exception as error:  # the third outcome, which must not be: counted, not hidden
        return Outcome(kind=settings.kind, violations=(f"{type(error).__name__}: {error}",))
    table = np.loadtxt(test.path / f"{test.profile_stem(settings.run_kind)}.csv", delimiter=",", skiprows=1)
    return _examined(settings.kind, table[:, 1], rig)


def _sheet(rng: np.random.Generator) -> str:
    voltage, rate = _between(rng, 0.3, 20.0), int(rng.choice(RATES))
    uncertain = rng.uniform(0.0, (0.2, 0.15, 0.5))
    return SHEET.format(
        voltage=voltage,
        slew_rate=voltage * _between(rng, 1.0, 500.0),
        angle=_between(rng, 1.0, 200.0),
        bias=voltage * float(rng.choice([0.0, rng.uniform(-0.6, 0.6)])),
        rate=rate,
        hold=rng.choice(["zero-order", "smooth"]),
        full_scale=voltage * _between(rng, 0.7, 4.0),
        sensor_rate=_between(rng, 20.0, 200.0),
        gain=_between(rng, 0.5, 60.0),
        natural_frequency=rate * _between(rng, 0.01, 0.12),
        damping_ratio=_between(rng, 0.01, 1.5),
        delay=float(rng.uniform(0.0, 0.05)),
        gain_uncertainty=float(uncertain[0]),
        natural_frequency_uncertainty=float(uncertain[1]),
        damping_ratio_uncertainty=float(uncertain[2]),
    )


def _settings(rig: Rig, rng: np.random.Generator) -> ExciteSettings:
    kind = KINDS[int(rng.integers(len(KINDS)))]
    resonance = rig.step_test.natural_frequency
    assert resonance is not None  # every sheet has one
    own = rng.random() < 0.7 and kind != "step"
    band = (resonance * _between(rng, 0.05, 0.9), resonance * _between(rng, 0.95, 4.0)) if own else None
    seconds = _between(rng, 15.0, 400.0) / resonance
    duration = None if kind == "step" and rng.random() < 0.5 else min(seconds, 60.0)
    return ExciteSettings(kind=kind, band=band, duration=duration, seed=int(rng.integers(1000)))


def _between(rng: np.random.Generator, low: float, high: float) -> float:
    """A number between the two, evenly on a logarithmic scale."""
    return float(low * (high / low) ** rng.random())


def _examined(kind: Kind, voltage: NDArray[np.float64], rig: Rig) -> Outcome:
    limits, step = rig.limits, 1 / rig.output.sample_rate
    around = np.concatenate([[limits.bias], voltage, [limits.bias]])
    allowed = min(limits.voltage, rig.output.full_scale)
    shares = {
        "voltage": float(np.max(np.abs(voltage))) / allowed,
        "slew rate": float(np.max(np.abs(np.diff(around)))) / step / limits.slew_rate,
        "swing": max(_swings(around, rig)) / limits.angle,
    }
    count = rig.output.full_scale / 2**31  # the bias itself is written to the nearest count
    slack = {"voltage": ROUNDING, "slew rate": ROUNDING + count / step / limits.slew_rate, "swing": 0.0}
    violations = [f"{name} at {share:.6g} of its limit" for name, share in shares.items() if share > 1 + slack[name]]
    return Outcome(
        kind=kind, voltage_share=shares["voltage"], slew_share=shares["slew rate"], swing_share=shares["swing"],
        violations=tuple(violations),
    )  # fmt: skip


def _swings(around: NDArray[np.float64], rig: Rig) -> Iterator[float]:
    """Largest exact angle of each rig of the box: the centre, then the corners."""
    known, step = rig.step_test, 1 / rig.output.sample_rate
    assert known.gain is not None and known.natural_frequency is not None and known.damping_ratio is not None
    smooth = rig.output.hold == "smooth"
    drive = (
        Drive.through_smooth_samples(around, start=0.0, interval=step, refine=8)
        if smooth
        else Drive.from_samples(around, start=0.0, interval=step, smooth=False)
    )
    ends = (-1.0, 1.0)
    for gain, frequency, damping in [(0.0, 0.0, 0.0), *itertools.product(ends, ends, ends)]:
        natural_frequency = known.natural_frequency * (1 + frequency * known.natural_frequency_uncertainty)
        damping_ratio = known.damping_ratio * (1 + damping * known.damping_ratio_uncertainty)
        response = HeldResponse(drive, natural_frequency, damping_ratio)
        end = len(around) * step + 3 / natural_frequency  # after the voltage rests a free swing only decays
        fine = step / math.ceil(POINTS_PER_PERIOD * natural_frequency * step + 4)
        angle = response.at(np.arange(0.0, end, fine))
        yield known.gain * (1 + gain * known.gain_uncertainty) * float(np.max(np.abs(angle)))


def outcome_of_number(seed: int, number: int) -> Outcome:
    """The outcome of one of the random sheets of a seed."""
    with tempfile.TemporaryDirectory() as scratch:
        return outcome_of_sheet(Path(scratch), np.random.default_rng([seed, number]))


def main() -> None:
    """Print the counts, the largest shares, and every violation."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--sheets", type=int, default=2000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--workers", type=int, default=1)
    arguments = parser.parse_args()
    outcomes = []
    with ProcessPoolExecutor(arguments.workers) as workers:
        numbers = range(arguments.sheets)
        for number, outcome in enumerate(workers.map(partial(outcome_of_number, arguments.seed), numbers)):
            outcomes.append(outcome)
            for violation in outcome.violations:
                print(f"sheet {number}, {outcome.kind}: {violation}", flush=True)
            if (number + 1) % 200 == 0:
                print(f"{number + 1} sheets", file=sys.stderr, flush=True)
    print_summary(outcomes)


def print_summary(outcomes: list[Outcome]) -> None:
    """Counts, largest shares and the kinds of refusal."""
    refused = [outcome for outcome in outcomes if outcome.refusal is not None]
    exported = [outcome for outcome in outcomes if outcome.refusal is None]
    bad = sum(bool(outcome.violations) for outcome in outcomes)
    print(f"{len(outcomes)} sheets: {len(exported)} exported, {len(refused)} refused, {bad} with violations")
    for name in ("voltage_share", "slew_share", "swing_share"):
        print(f"  largest {name.replace('_', ' ')}: {max((getattr(o, name) for o in exported), default=0.0):.6f}")
    for words, count in Counter(re.sub(r"[-+]?\d[\d.e+-]*", "#", str(o.refusal))[:90] for o in refused).most_common(8):
        print(f"  {count:5d} refused: {words}")


if __name__ == "__main__":
    main()
