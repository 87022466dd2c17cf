"""Is the verdict right? Pairs of short tests of one rig, of rigs that truly differ, and of rigs seen too briefly.

1. Same rig: a multisine test of 17 s and a step test of 20 s of the same rig (three dampings in turn, two clocks):
   *disagree* must come out in at most 1 % of the pairs.
2. Damping ratio truly 20 % larger in one of the two, uncertainty small: *disagree* in at least 99 %.
3. Records of 13 and 11 s and noise seven times as large: *unresolved*; then the test that the cross-check proposes is
   designed, run and evaluated, and the verdict, with the new run in place of the old, must be resolved in at least
   95 %, and rightly so.

    python tests/benchmarks/verdict.py [--pairs 1000] [--brief 100] [--part 1 --part 2 --part 3]
"""

from __future__ import annotations

import argparse
import shlex
from collections import Counter
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

import numpy as np

from excitation.limits import Limits
from excitation.multisine import design_multisine
from excitation.multisine_layout import MultisineSettings
from excitation.profile import Profile
from excitation.step_sequence import StepSettings, design_step_sequence
from freqid.capture.simulated_rig import SimulatedRig, SimulatedSensor, input_from_profile
from freqid.crosscheck.comparison import cross_check
from freqid.crosscheck.comparison_result import CrossCheck
from freqid.crosscheck.next_test import TestKind
from freqid.estimate.identification import Identification, identify
from freqid.rig import Rig
from freqid.rig_template import built_in_vane
from freqid.second_order import SecondOrder
from freqid.stages.forecast import forecast_for
from freqid.step_test.evaluation import evaluate_steps
from freqid.step_test.step_result import StepResult

LIMITS = Limits(voltage=5.0, slew_rate=500.0, angle=30.0)
TOLERANCE = {"gain": 0.05, "natural_frequency": 0.02, "damping_ratio": 0.10}
DAMPINGS = (0.08, 0.12, 0.3)
NOISE, LOUD = 0.3, 2.0  # deg
USUAL: dict[TestKind, float] = {"multisine": 17.0, "step": 20.0}  # s
BRIEF: dict[TestKind, float] = {"multisine": 13.0, "step": 11.0}  # s
DIFFERENCE = 1.2


@dataclass(frozen=True, slots=True, kw_only=True)
class Pair:
    """What the two tests gave."""

    found: Identification
    step: StepResult
    check: CrossCheck


class Bench:
    """One rig with its profiles; every run draws its noise, clock and losses from `rng`."""

    def __init__(self, damping_ratio: float, noise: float, usual: Mapping[TestKind, float]) -> None:
        self.model = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=damping_ratio, delay=0.02)
        self.noise, self.usual = noise, usual
        self._profiles: dict[tuple[TestKind, float], Profile] = {}
        sheet = built_in_vane()
        known = replace(sheet.step_test, damping_ratio=damping_ratio)
        self.sheet: Rig = replace(sheet, step_test=known)

    def profile(self, kind: TestKind, duration: float | None) -> Profile:
        """The profile of this kind; at the usual, short duration where None."""
        key = (kind, duration or self.usual[kind])
        if key not in self._profiles:
            self._profiles[key] = (_multisine if kind == "multisine" else _steps)(self.model, key[1])
        return self._profiles[key]

    def run_response(self, model: SecondOrder, duration: float | None, rng: np.random.Generator) -> Identification:
        """A frequency test of `model`."""
        drive = input_from_profile(self.profile("multisine", duration))
        return identify(self._rig(model, rng).run(drive, kind="response", name="response", rng=rng))

    def run_steps(self, model: SecondOrder, duration: float | None, rng: np.random.Generator) -> StepResult:
        """A step test of `model`."""
        drive = input_from_profile(self.profile("step", duration))
        return evaluate_steps(self._rig(model, rng).run(drive, kind="step", name="step", rng=rng))

    def check(self, found: Identification, step: StepResult) -> Pair:
        """Both held against each other, with the proposal for the next test."""
        forecast = forecast_for(self.sheet, found, step, design=self.profile)
        check = cross_check(found.model, step, tolerance=TOLERANCE, folder="bench", forecast=forecast)
        return Pair(found=found, step=step, check=check)

    def _rig(self, model: SecondOrder, rng: np.random.Generator) -> SimulatedRig:
        sensor = SimulatedSensor(
            sample_rate=60.0,
            exposure=0.004,
            noise=self.noise,
            jitter=0.001,
            lost_frames=0.02,
            clock_ratio=1 + float(rng.uniform(-3e-4, 3e-4)),
            clock_offset=float(rng.uniform(-0.5, 0.5)),
        )
        return SimulatedRig(model=model, sensor=sensor)


def main() -> None:
    """Run the three parts and print their tables as they come."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--pairs", type=int, default=1000)
    parser.add_argument("--brief", type=int, default=100)
    parser.add_argument("--part", type=int, action="append", choices=[1, 2, 3])
    asked = parser.parse_args()
    parts = asked.part or [1, 2, 3]
    if 1 in parts:
        told("1. same rig", asked.pairs, same_rig)
    if 2 in parts:
        told("2. damping ratio 20 % different", asked.pairs, different_rig)
    if 3 in parts:
        too_little_data(asked.brief)


def told(title: str, pairs: int, verdict: Callable[[int, list[Bench]], str]) -> None:
    """Count the verdicts over `pairs` seeds."""
    benches = [Bench(damping, NOISE, USUAL) for damping in DAMPINGS]
    counts = Counter(verdict(seed, benches) for seed in range(pairs))
    shares = ", ".join(f"{word} {100 * counts[word] / pairs:.1f} %" for word in ("agree", "unresolved", "disagree"))
    print(f"{title}: {pairs} pairs: {shares}", flush=True)


def same_rig(seed: int, benches: list[Bench]) -> str:
    """The verdict on one pair of tests of one rig."""
    bench, rng = benches[seed % len(benches)], np.random.default_rng([1, seed])
    found, step = bench.run_response(bench.model, None, rng), bench.run_steps(bench.model, None, rng)
    return bench.check(found, step).check.verdict


def different_rig(seed: int, benches: list[Bench]) -> str:
    """The verdict where one of the two saw a damping ratio 20 % larger."""
    bench, rng = benches[seed % len(benches)], np.random.default_rng([2, seed])
    more = replace(bench.model, damping_ratio=DIFFERENCE * bench.model.damping_ratio)
    first, second = (more, bench.model) if seed % 2 else (bench.model, more)
    found, step = bench.run_response(first, None, rng), bench.run_steps(second, None, rng)
    return bench.check(found, step).check.verdict


def too_little_data(pairs: int) -> None:
    """Part 3, for the same rig and for the different one."""
    for title, factor, right in (("same rig", 1.0, "agree"), ("damping ratio 20 % different", DIFFERENCE, "disagree")):
        benches = [Bench(damping, LOUD, BRIEF) for damping in DAMPINGS]
        before: Counter[str] = Counter()
        after: Counter[str] = Counter()
        durations = []
        seed = 0
        while before["unresolved"] < pairs and seed < 3 * pairs:
            bench, rng = benches[seed % len(benches)], np.random.default_rng([3, seed])
            other = replace(bench.model, damping_ratio=factor * bench.model.damping_ratio)
            pair = bench.check(bench.run_response(bench.model, None, rng), bench.run_steps(other, None, rng))
            before[pair.check.verdict] += 1
            seed += 1
            if pair.check.verdict == "unresolved":
                renewed, spent = _as_proposed(bench, other, pair, rng)
                after[renewed.check.verdict] += 1
                durations.append(spent)
        done = max(sum(after.values()), 1)
        print(f"3. too little data, {title}: of {seed} pairs {100 * before['unresolved'] / seed:.1f} % unresolved; "
              f"after the proposed test (median {np.median(durations or [0.0]):.0f} s) "
              + ", ".join(f"{word} {100 * after[word] / done:.1f} %" for word in ("agree", "unresolved", "disagree"))
              + f" ({right} is right)", flush=True)  # fmt: skip


def _as_proposed(bench: Bench, other: SecondOrder, pair: Pair, rng: np.random.Generator) -> tuple[Pair, float]:
    """The pair with the runs that the proposal's commands ask for, and their time."""
    proposal = pair.check.next_test
    assert proposal is not None
    found, step, spent = pair.found, pair.step, 0.0
    for command in proposal.commands:
        words = shlex.split(command)
        kind, duration = words[words.index("--kind") + 1], float(words[words.index("--duration") + 1])
        spent += duration
        if kind == "step":
            step = bench.run_steps(other, duration, rng)
        else:
            found = bench.run_response(bench.model, duration, rng)
    return bench.check(found, step), spent


def _multisine(model: SecondOrder, duration: float) -> Profile:
    settings = MultisineSettings(
        band=(0.5, 8.0), duration=duration, sample_rate=500.0, limits=LIMITS, rigs=(model,),
        phases="schroeder", period=4.0,
    )  # fmt: skip
    return design_multisine(settings)


def _steps(model: SecondOrder, duration: float) -> Profile:
    return design_step_sequence(
        StepSettings(sample_rate=500.0, limits=LIMITS, duration=duration, rigs=(model,), hold_time=3.0)
    )


if __name__ == "__main__":
    main()
