"""Which test settles it? The one whose uncertainty stands in the way, as long as it takes to bring that down.

A difference known to H (half width of its 95 % interval) can be judged unless the true one lies within H below the
tolerance. Aimed at is H = 0.4 tolerance: two results of the same rig then remain unresolved in fewer than 1 % of all
cases (the difference would have to exceed 0.6 tolerance = 2.9 standard uncertainties). Where the difference found
already lies close to the tolerance, H is half the distance to it, but no less than a tenth of the tolerance.

What a test of some length will reach comes from the Fisher information of its excitation (a `Forecast`, made by the
caller, who knows the rig sheet); without one, random uncertainty is taken to fall with the root of the duration.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Literal

from excitation.errors import ExcitationError
from freqid.crosscheck.comparison_result import ComparedRow, CrossCheck, NextTest
from freqid.crosscheck.findings import Findings
from freqid.estimate.model import IdentifiedModel
from freqid.quantity import coverage_factor
from freqid.step_test.step_result import StepResult

__all__ = ["Forecast", "Promise", "TestKind", "propose_next_test", "propose_repeat"]

TestKind = Literal["multisine", "step"]

AIM, LEAST_AIM = 0.4, 0.1  # half width wanted for the difference, over the tolerance
SPARE = 1.15  # of the duration: the noise of the next run is not exactly that of the last
FEWEST_FREEDOM = 60.0  # degrees of freedom that the coverage factor of the next test allows for
SHORTEST_CHANGE = 1.2  # a test is repeated with at least this much less uncertainty
LONGEST = 3600.0  # s
NO_HINDRANCE = 0.5  # of the half width wanted: a test that certain need not be repeated

_SETTLES = "which settles it unless the true difference lies just below the tolerance."
_FALLS_SHORT = "but ± {:.2g} % is needed: lower the noise of the angle, or widen the tolerance."


_AT_HALF_THE_STEP = frozenset({"dry_friction", "end_stop", "backlash"})
_AT_A_THIRD_OF_THE_LEVEL = frozenset({"hardening_spring", "softening_spring"})
_REPEATED = (
    "repeat the frequency test with new phases at the operating point and amplitude of the step test: if the result "
    "stays, the rig differs between the tests; if it moves, something drifts."
)
_DISTORTED = (
    "Nonlinear distortion, not noise, limits the frequency test: a longer one would not help. A run at half the "
    "voltage shows whether the rig depends on amplitude (`freqid estimate --run all`)."
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Promise:
    """What a test of this kind, `duration` (s) and `amplitude` (V; None: as before) will reach: standard uncertainties
    by parameter.
    """

    kind: TestKind
    duration: float
    amplitude: float | None
    standard_uncertainty: Mapping[str, float]


Forecast = Callable[[TestKind, float | None], Promise]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Need:
    """What the difference of one quantity must be known to, and the half widths (95 %) that both tests have now."""

    quantity: str
    wanted: float
    frequency_half: float
    step_half: float
    mean: float

    def half_now(self, kind: TestKind) -> float:
        return self.step_half if kind == "step" else self.frequency_half


def propose_next_test(
    check: CrossCheck, model: IdentifiedModel, step: StepResult, *, folder: str, forecast: Forecast | None = None
) -> NextTest | None:
    """The next test for an unresolved or contradicted verdict; None where the tests agree.

    `folder` is named in the command; `forecast` tells what a test will reach.
    """
    if check.verdict == "agree":
        return None
    if check.verdict == "disagree":
        return _after_disagreement(check, step, folder)
    unresolved = [row for row in check.compared if row.verdict == "unresolved"]
    lacking = [row for row in unresolved if row.difference is None or row.tolerance is None]
    if lacking:
        names = ", ".join(row.quantity.replace("_", " ") for row in lacking)
        return NextTest(
            command=f"freqid excite {folder} --kind multisine",
            reason=f"{names}: not determined by both tests; excite around the resonance and at low frequency.",
            kind="multisine",
        )
    needs = [_need(row) for row in check.compared if row.tolerance is not None and row.difference is not None]
    if not needs:
        return NextTest(
            command=f"freqid crosscheck {folder}",
            reason="Nothing is judged without a tolerance: set those of [tolerance] in rig.toml, then run it again.",
        )
    if any(found.significant for found in model.distortion) and any(n.frequency_half > n.wanted for n in needs):
        return NextTest(command=f"freqid capture {folder} --levels 0.5", reason=_DISTORTED, kind="multisine")
    usual = _by_root_of_duration(model, step)
    try:
        return _planned(needs, forecast or usual, folder)
    except ExcitationError:  # the rig sheet tells too little to design a test
        return _planned(needs, usual, folder)


def propose_repeat(check: CrossCheck, first: Findings, second: Findings) -> NextTest | None:
    """The longer test of either side that would settle an unresolved comparison of any two results.

    None where the verdict stands, or where neither side can be repeated. Uncertainty is taken to fall with the root of
    the duration.
    """
    rows = [row for row in check.compared if row.tolerance is not None and row.difference is not None]
    sides = [side for side in (first, second) if side.recorded_time > 0]
    if check.verdict != "unresolved" or not rows or not sides:
        return None
    needs = [_need(row) for row in rows]
    commands = []
    for side in sides:
        halves = [need.frequency_half if side is first else need.step_half for need in needs]
        factor = max(half / need.wanted for need, half in zip(needs, halves, strict=True))
        if factor < NO_HINDRANCE and len(sides) > 1:
            continue
        duration = _round_up(SPARE * side.recorded_time * max(factor * math.sqrt(2), SHORTEST_CHANGE) ** 2)
        kind = "step" if side.kind == "step test" else "multisine"
        commands.append(f"freqid excite {side.folder} --kind {kind} --duration {duration}")
    if not commands:
        return None
    wanted = max(100 * need.wanted / need.mean for need in needs)
    return NextTest(
        command=commands[0],
        reason=f"A longer test brings every difference to 0.4 of its tolerance (± {wanted:.2g} % at most).",
        kind=commands[0].split("--kind ")[1].split()[0],
        commands=tuple(commands),
    )


def _after_disagreement(check: CrossCheck, step: StepResult, folder: str) -> NextTest:
    """The test that settles the strongest cause; without one, the frequency test again: rig or method?"""
    cause = next((c for c in check.causes if c.settling_test), None)
    repeat = f"freqid excite {folder} --kind multisine --seed 2"
    if cause is None:
        return NextTest(command=repeat, reason=f"{_REPEATED[0].upper()}{_REPEATED[1:]}", kind="multisine")
    largest = max((abs(one.voltage_after - one.voltage_before) for one in step.steps), default=0.0)
    if cause.cause in _AT_HALF_THE_STEP and largest > 0:
        amplitude = float(f"{largest / 2:.3g}")
        command = f"freqid excite {folder} --kind step --amplitude {amplitude:g}"
        return NextTest(command=command, reason=cause.settling_test, kind="step", amplitude=amplitude)
    if cause.cause in _AT_A_THIRD_OF_THE_LEVEL:
        return NextTest(command=f"freqid capture {folder} --levels 0.33", reason=cause.settling_test, kind="multisine")
    return NextTest(command=repeat, reason=f"{cause.settling_test} Then {_REPEATED}", kind="multisine")


def _need(row: ComparedRow) -> _Need:
    assert row.difference is not None and row.tolerance is not None
    assert row.frequency_test is not None and row.step_test is not None
    gap = abs(abs(row.difference.value) - row.tolerance)
    reach = math.hypot(gap, row.difference.standard_uncertainty) / 2
    return _Need(
        quantity=row.quantity,
        wanted=min(max(reach, LEAST_AIM * row.tolerance), AIM * row.tolerance),
        frequency_half=row.frequency_test.expanded_uncertainty,
        step_half=row.step_test.expanded_uncertainty,
        mean=(abs(row.frequency_test.value) + abs(row.step_test.value)) / 2,
    )


def _planned(needs: list[_Need], forecast: Forecast, folder: str) -> NextTest:
    """The shortest of: a new step test, a new frequency test, both."""
    choices: tuple[tuple[TestKind, ...], ...] = (("step",), ("multisine",), ("multisine", "step"))
    plans = [plan for kinds in choices if (plan := _plan(needs, forecast, kinds)) is not None]
    best = min(plans, key=lambda plan: sum(promise.duration for promise in plan))
    return _told(best, needs, folder)


def _plan(needs: list[_Need], forecast: Forecast, kinds: tuple[TestKind, ...]) -> list[Promise] | None:
    """The tests of these kinds, long enough for every need; None where what is not repeated stands in the way."""
    allowed = {}
    for need in needs:
        rest = 0.0 if len(kinds) == 2 else need.half_now("multisine" if kinds[0] == "step" else "step")
        room = need.wanted**2 - rest**2
        if room <= 0.1 * need.wanted**2:
            return None
        allowed[need.quantity] = math.sqrt(room / len(kinds))
    return [_long_enough(kind, allowed, forecast) for kind in kinds]


def _long_enough(kind: TestKind, allowed: Mapping[str, float], forecast: Forecast) -> Promise:
    """The test that reaches the allowed half widths: the usual one, lengthened until its forecast suffices."""
    promise = forecast(kind, None)
    for _ in range(3):
        factor = max(_half(promise, name) / half for name, half in allowed.items())
        needed = min(SPARE * promise.duration * factor**2, LONGEST)
        if factor <= 1 or needed <= promise.duration:
            return promise
        promise = forecast(kind, float(_round_up(needed)))
    return promise


def _half(promise: Promise, name: str) -> float:
    return coverage_factor(FEWEST_FREEDOM) * promise.standard_uncertainty[name]


def _told(plan: list[Promise], needs: list[_Need], folder: str) -> NextTest:
    commands = tuple(_command(promise, folder) for promise in plan)
    renewed = {promise.kind: promise for promise in plan}
    reached = {}
    for need in needs:
        halves = [
            _half(renewed[kind], need.quantity) if kind in renewed else need.half_now(kind)
            for kind in ("multisine", "step")
        ]
        reached[need.quantity] = math.hypot(*halves) / need.mean
    worst = max(needs, key=lambda need: math.hypot(need.frequency_half, need.step_half) / need.wanted)
    name = worst.quantity.replace("_", " ")
    now = math.hypot(worst.frequency_half, worst.step_half) / worst.mean
    runs = " and ".join(_described(promise) for promise in plan)
    enough = reached[worst.quantity] * worst.mean <= 1.1 * worst.wanted
    return NextTest(
        command=commands[0],
        reason=(
            f"Run {runs}: the {name} difference will then be known to ± {100 * reached[worst.quantity]:.2g} % instead "
            f"of ± {100 * now:.2g} %, "
            + (_SETTLES if enough else _FALLS_SHORT.format(100 * worst.wanted / worst.mean))
        ),
        kind=plan[0].kind,
        duration=plan[0].duration,
        amplitude=plan[0].amplitude,
        commands=commands,
        expected=reached,
    )


def _command(promise: Promise, folder: str) -> str:
    # the largest safe amplitude of a multisine depends on its phases: there `excite` takes it by itself
    stated = promise.kind == "step" and promise.amplitude is not None
    amplitude = f" --amplitude {promise.amplitude:.4g}" if stated else ""
    return f"freqid excite {folder} --kind {promise.kind} --duration {promise.duration:.4g}{amplitude}"


def _described(promise: Promise) -> str:
    word = "step" if promise.kind == "step" else "frequency"
    amplitude = "" if promise.amplitude is None else f" at {promise.amplitude:.3g} V"
    return f"a {word} test of {promise.duration:.4g} s{amplitude}"


def _by_root_of_duration(model: IdentifiedModel, step: StepResult) -> Forecast:
    """What the tests at hand would have reached in another time."""

    def forecast(kind: TestKind, duration: float | None) -> Promise:
        test = step if kind == "step" else model
        present = max(test.clock.frames, 1) * test.clock.frame_interval
        shrink = math.sqrt(present / (duration or present))
        return Promise(
            kind=kind,
            duration=duration or present,
            amplitude=None,
            standard_uncertainty={
                name: q.standard_uncertainty * shrink for name, q in test.parameters.items() if q is not None
            },
        )

    return forecast


def _round_up(seconds: float) -> int:
    step: int = 10 ** max(math.floor(math.log10(seconds)) - 1, 0)
    return math.ceil(seconds / step) * step
