"""Are faults of the data named where they are, with their figures, and not where they are not?"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from two_tests import VANE, checked, clock, frequency_test, step_test

from freqid.capture.clock_map import ClockMap
from freqid.crosscheck.causes import probable_causes
from freqid.crosscheck.comparison_result import Cause
from freqid.crosscheck.evidence import Evidence


def causes(response: ClockMap, step: ClockMap, vector: np.ndarray = VANE) -> tuple[Cause, ...]:
    """What is named for two equal results whose clocks are these."""
    first, second = replace(frequency_test(vector), clock=response), replace(step_test(vector), clock=step)
    return probable_causes(Evidence(check=checked(first, second), model=first, step=second))


def test_lost_frames_are_named_beyond_the_usual() -> None:
    """3600 frames: 3 % and four deviations of a count make 150; 140 lost are usual, 200 are not."""
    assert causes(clock(), replace(clock(), lost_frames=140)) == ()
    (cause,) = causes(clock(), replace(clock(), lost_frames=200, lost_at=np.arange(200.0)))
    assert cause.cause == "lost_frames"
    assert "200 of 3800 frames (5.3 %) are missing from the step test" in cause.evidence
    assert cause.exhibit is not None
    np.testing.assert_array_equal(cause.exhibit.series[0].y, np.arange(1, 201))


def test_a_silent_loss_is_always_named() -> None:
    """It shifts everything after it."""
    (cause,) = causes(replace(clock(), silently_lost_at=np.array([12.0])), clock())
    assert cause.cause == "lost_frames"
    assert "without a gap" in cause.evidence
    assert cause.against == ""


def test_the_worse_test_is_named_once() -> None:
    """Both lose frames, the step test more."""
    (cause,) = causes(replace(clock(), lost_frames=400), replace(clock(), lost_frames=900))
    assert "step test" in cause.evidence


@pytest.mark.parametrize(("rate", "named"), [(20.0, True), (30.0, False)])
def test_too_few_frames_per_oscillation_are_named(rate: float, named: bool) -> None:
    """At 3 Hz and damping ratio 0.12 a peak needs 23.8 frames/s."""
    found = causes(clock(), replace(clock(), frame_interval=1 / rate))
    assert [cause.cause for cause in found] == ["low_frame_rate"] * named
    if named:
        assert "6.7 frames per oscillation" in found[0].evidence
        assert "23.8 frames/s" in found[0].settling_test


def test_a_rig_that_does_not_oscillate_needs_no_frames_for_peaks() -> None:
    """Damping ratio 1.2."""
    assert causes(clock(), replace(clock(), frame_interval=0.2), VANE * [1, 1, 10, 1]) == ()
