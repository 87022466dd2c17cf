"""Do the data themselves fall short? Lost frames, too few frames per oscillation, too little data.

Frames lost beyond 3 % (or any lost without a gap in the stamps) and fewer than eight frames per oscillation are faults
of the measurement: the estimates allow for them, read-offs do not. Eight is the least with which a peak can be read
off (the step test's own limit). Too little data is no fault but the plain reason for an open verdict.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from freqid.capture.clock_map import ClockMap
from freqid.crosscheck.comparison_result import Cause
from freqid.crosscheck.evidence import Evidence
from freqid.crosscheck.exhibit import Exhibit, Series, SeriesSource
from freqid.second_order import SecondOrder

__all__ = ["causes_from_data", "causes_of_an_open_verdict"]

USUAL_LOSS = 0.03
FRAMES_PER_PERIOD = 8
CHANCE = 4.0  # standard deviations of a count


def causes_from_data(evidence: Evidence, *, silent_losses: bool = True) -> tuple[Cause, ...]:
    """Causes that lie in the data, strongest first; `silent_losses` tells whether those found are believed."""
    clocks = [("frequency test", evidence.model.clock), ("step test", evidence.step.clock)]
    if not silent_losses:
        clocks = [(name, replace(clock, silently_lost_at=np.empty(0))) for name, clock in clocks]
    found = [
        *(_lost_frames(name, clock) for name, clock in clocks),
        _low_frame_rate(evidence.model.model, evidence),
    ]
    lost = [cause for cause in found if cause is not None and cause.cause == "lost_frames"]
    others = [cause for cause in found if cause is not None and cause.cause != "lost_frames"]
    worst = [max(lost, key=lambda cause: cause.strength)] if lost else []
    return tuple(sorted([*others, *worst], key=lambda cause: -cause.strength))


def causes_of_an_open_verdict(evidence: Evidence) -> tuple[Cause, ...]:
    """Too little data, where the uncertainty alone leaves the verdict open."""
    if evidence.check.verdict != "unresolved":
        return ()
    wide = [
        row.quantity.replace("_", " ")
        for row in evidence.check.compared
        if row.verdict == "unresolved"
        and row.difference is not None
        and row.tolerance is not None
        and row.difference.expanded_uncertainty > row.tolerance
    ]
    if not wide:
        return ()
    cause = Cause(
        cause="too_little_data",
        strength=1.0,
        evidence=f"The uncertainty of the difference alone exceeds the tolerance for {', '.join(wide)}.",
    )
    return (cause,)


def _lost_frames(test: str, clock: ClockMap) -> Cause | None:
    total = clock.frames + clock.lost_frames
    if total <= 0:
        return None
    share = clock.lost_frames / total
    silent = len(clock.silently_lost_at)
    usual = USUAL_LOSS + CHANCE * math.sqrt(USUAL_LOSS / total)
    if share <= usual and not silent:
        return None
    told = [f"{clock.lost_frames} of {total} frames ({100 * share:.2g} %) are missing from the {test}"]
    if silent:
        told.append(f"{silent} of them without a gap in the stamps, found by the jump in time they leave")
    return Cause(
        cause="lost_frames",
        strength=float(np.clip(max(share / usual / 10, 0.3 if silent else 0.0) + 0.2, 0.2, 0.9)),
        evidence=f"{'; '.join(told)}. Read-offs between frames suffer; the fits use every frame at its own instant.",
        against="" if silent else "The stamps show every gap, so the fitted values are not shifted by the losses.",
        exhibit=_losses(test, clock),
        settling_test="Record again with a lower frame rate, a shorter cable or a faster disk, and compare the count.",
    )


def _losses(test: str, clock: ClockMap) -> Exhibit | None:
    at = np.sort(np.concatenate([clock.lost_at, clock.silently_lost_at]))
    if not len(at):
        return None
    source: SeriesSource = "frequency test" if test == "frequency test" else "step test"
    series = Series(kind="points", source=source, label="gaps", x=at, y=np.arange(1.0, len(at) + 1))
    return Exhibit(
        title=f"gaps in the {test}, counted", x_label="stamp", x_unit="s", y_label="gaps", y_unit="", series=(series,)
    )


def _low_frame_rate(model: SecondOrder, evidence: Evidence) -> Cause | None:
    if model.damping_ratio >= 1:
        return None
    period = 1 / (model.natural_frequency * math.sqrt(1 - model.damping_ratio**2))
    counts = {
        "frequency test": period / evidence.model.clock.frame_interval,
        "step test": period / evidence.step.clock.frame_interval,
    }
    test, frames = min(counts.items(), key=lambda item: item[1])
    if frames >= FRAMES_PER_PERIOD:
        return None
    times = np.linspace(0, period, 200)
    seen = np.arange(0, period, period / frames)
    wave = Series(kind="line", source="model", label="one oscillation", x=times, y=np.cos(2 * np.pi * times / period))
    dots = Series(kind="points", source="step test", label="frames", x=seen, y=np.cos(2 * np.pi * seen / period))
    return Cause(
        cause="low_frame_rate",
        strength=float(np.clip(1 - frames / (FRAMES_PER_PERIOD + 4), 0.2, 0.95)),
        evidence=(
            f"The {test} has {frames:.2g} frames per oscillation; {FRAMES_PER_PERIOD} are needed to read off a peak,"
            " and a reading between them is low by up to"
            f" {100 * (1 - math.cos(math.pi / max(frames, 2))):.2g} % of the swing."
        ),
        against="The fitted values use the exact motion at each frame and do not need a peak between them.",
        exhibit=Exhibit(title="frames in one oscillation", x_label="time", x_unit="s", y_label="swing", y_unit="",
                        series=(wave, dots)),
        settling_test=f"Record at {FRAMES_PER_PERIOD / period:.3g} frames/s at least.",
    )  # fmt: skip
