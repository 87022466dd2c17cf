"""What was done to the data, in sentences? The run as it came, its clock, what was lost on the way."""

from __future__ import annotations

import numpy as np

from freqid.capture.clock_map import ClockMap
from freqid.records import Run
from freqid.report.quantity_words import minus, with_uncertainty

__all__ = ["clock_sentences", "run_sentences"]


def run_sentences(run: Run) -> list[str]:
    """The run: how much of it, what stands for what, what the import found."""
    voltage, angle = run.input, run.angle
    unreadable = int(np.count_nonzero(~(np.isfinite(angle.angle) & np.isfinite(angle.time))))
    said = "the profile as sent" if voltage.commanded else "as measured"
    held = "held between its samples" if voltage.hold == "zero-order" else "smooth between its samples"
    sentences = [
        f"Run {run.name}: {len(angle.time)} angle frames over {np.ptp(angle.time[np.isfinite(angle.time)]):.4g} s,"
        f" exposure {angle.exposure:g} s, stamps mark the {angle.stamp} of the exposure.",
        f"Voltage: {len(voltage.time)} samples, {said}, {held}, from {minus(f'{np.nanmin(voltage.voltage):.4g}')} to "
        f"{minus(f'{np.nanmax(voltage.voltage):.4g}')} V.",
        f"Left out: {unreadable or 'no'} frames without a readable angle.",
    ]
    if voltage.periodicity is not None:
        p = voltage.periodicity
        sentences.append(f"{p.n_periods} whole periods of {p.period:.5g} s, {len(p.lines)} excited lines.")
    if not run.complete:
        sentences.append("The run ended early: it is not complete.")
    if run.simulated:
        sentences.append("The run was simulated: no real rig was driven.")
    return [*sentences, *run.notes]


def clock_sentences(clock: ClockMap) -> list[str]:
    """The clock map and the state of the frames."""
    ratio = f"The sensor's second is {with_uncertainty(clock.ratio_ppm)} longer than that of the voltage."
    if clock.offset_known:
        zero = "Both streams share one clock: the delay is the rig's own."
    else:
        zero = (
            "The offset between the two clocks is unknown; the delay less that offset is "
            f"{with_uncertainty(clock.lag)}, and neither can be told alone."
        )
    frames = (
        f"{clock.lost_frames} of {clock.frames + clock.lost_frames} frames were lost, in {len(clock.lost_at)} gaps; "
        "the others were taken as they are, at their own instants, none was filled in. "
        f"Frame interval {clock.frame_interval:.6g} s, stamp jitter {1e3 * clock.jitter:.3g} ms rms, "
        f"{clock.repeated_stamps} repeated stamps."
    )
    return [zero, frames] if clock.offset_known else [ratio, zero, frames]
