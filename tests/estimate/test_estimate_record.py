"""A run made ready for the estimators: nothing shifted but the stamp, and every useless record refused in one line."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from freqid.errors import EstimationError
from freqid.estimate.record import MINIMUM_FRAMES, Record
from freqid.records import InputStream, Periodicity, Run
from freqid.second_order import SecondOrder

Recorder = Callable[..., Run]


@pytest.fixture(scope="module")
def run(short_multisine: InputStream, vane_model: SecondOrder, recorded: Recorder) -> Run:
    """One noisy record of the short multisine."""
    return recorded(short_multisine, vane_model, noise=0.3, seed=1)


def with_frames(run: Run, **changes: object) -> Run:
    """The run with other frames."""
    return replace(run, angle=replace(run.angle, **changes))  # type: ignore[arg-type]


def with_input(run: Run, **changes: object) -> Run:
    """The run with another input."""
    return replace(run, input=replace(run.input, **changes))  # type: ignore[arg-type]


@pytest.mark.parametrize(("stamp", "late"), [("start", 0.008), ("middle", 0.004), ("end", 0.0)])
def test_stamps_move_to_the_end_of_the_exposure(stamp: str, late: float, run: Run) -> None:
    """By the whole exposure, half of it or nothing; angles stay as they came."""
    record = Record.from_run(with_frames(run, exposure=0.008, stamp=stamp))
    np.testing.assert_allclose(record.stamp, run.angle.time + late, rtol=1e-15)
    np.testing.assert_array_equal(record.angle, run.angle.angle)
    assert record.frame_interval == pytest.approx(1 / 60, rel=1e-9)


def test_unreadable_frames_are_left_out_and_counted(run: Run) -> None:
    """NaN angles and NaN stamps go, and the user is told how many."""
    angle, time = run.angle.angle.copy(), run.angle.time.copy()
    angle[[3, 40]], time[[7]] = np.nan, np.nan
    record = Record.from_run(with_frames(run, angle=angle, time=time))
    assert len(record.angle) == len(angle) - 3
    assert [c.code for c in record.caveats] == ["unreadable_frames"]
    assert record.caveats[0].message.startswith("3 frames")


def test_a_commanded_voltage_starts_from_rest_and_a_measured_one_may_not(run: Run) -> None:
    """Only what was sent is known before its first sample."""
    assert not Record.from_run(run).free_start
    measured = Record.from_run(with_input(run, commanded=False))
    assert measured.free_start
    assert measured.stamp[-1] <= run.input.time[-1] + 2 / 500


def test_frames_outside_a_measured_voltage_are_left_out(run: Run) -> None:
    """Nobody knows what drove them; frames beyond a commanded one stay, for the voltage rests there."""
    later = with_input(run, time=run.input.time + 2.0)
    assert len(Record.from_run(later).stamp) == len(run.angle.time)
    record = Record.from_run(with_input(later, commanded=False))
    assert record.stamp[0] >= 2.0
    assert len(record.stamp) == np.sum(run.angle.time >= 2.0)


def test_a_staircase_is_taken_as_it_is(run: Run) -> None:
    """No refinement, no smoothing: the samples from rest, slope zero."""
    drive = Record.from_run(run).drive
    np.testing.assert_array_equal(drive.value + drive.rest, run.input.voltage)
    assert not np.any(drive.slope)
    assert drive.interval == pytest.approx(1 / 500, rel=1e-12)


def test_a_smooth_voltage_is_refined_to_within_the_error_of_a_spline(run: Run) -> None:
    """A cosine of 8 Hz at 500 Hz between its samples.

    A cubic spline errs by (5/384) (2 pi f T)^4 = 1.3e-6 of the amplitude inside, somewhat more in the end intervals;
    the straight lines over an eighth of a sample err by (2 pi f T / 8)^2 / 8 = 2e-5.
    """
    time = np.arange(8500) / 500
    drive = Record.from_run(with_input(run, time=time, voltage=2 * np.cos(2 * np.pi * 8 * time), hold="smooth")).drive
    instants = np.linspace(0.05, 16.9, 5000)
    index, since = drive.locate(instants)
    got = drive.value[index] + drive.slope[index] * since + drive.rest
    np.testing.assert_allclose(got, 2 * np.cos(2 * np.pi * 8 * instants), atol=2 * 2.5e-5)


def test_a_logged_whole_number_of_periods_leads_back_to_its_start(run: Run) -> None:
    """Where the log ends with the last sample of a period, the drive goes on to the first sample of the next."""
    n, rate = 400, 100.0
    time = np.arange(n) / rate
    voltage = np.cos(2 * np.pi * time)  # one period is 1 s
    periodicity = Periodicity(period=1.0, lines=np.array([1.0]), start=0.0, stop=n / rate)
    source = with_input(run, time=time, voltage=voltage, hold="smooth", commanded=False, periodicity=periodicity)
    drive = Record.from_run(source).drive
    assert drive.stop == pytest.approx(n / rate)
    assert drive.value[-1] == pytest.approx(drive.value[0], abs=1e-12)


def test_irregular_input_stamps_are_followed(run: Run) -> None:
    """A staircase whose steps come at uneven times steps there, within a quarter of a sample, and the user is told."""
    rng = np.random.default_rng(3)
    time = np.arange(2000) / 100 + 0.004 * rng.random(2000)
    voltage = np.repeat(rng.normal(size=20), 100)
    record = Record.from_run(with_input(run, time=time, voltage=voltage))
    drive = record.drive
    assert "input_stamps_irregular" in [c.code for c in record.caveats]
    jumps = np.flatnonzero(np.diff(drive.value)) + 1
    expected = time[100::100]
    assert len(jumps) == len(expected)
    np.testing.assert_allclose(drive.start + jumps * drive.interval, expected, atol=drive.interval * (1 + 1e-6))
    assert drive.interval < 0.3 / 100


def test_stamps_rounded_to_milliseconds_are_still_one_grid(run: Run) -> None:
    """At 700 Hz a stamp in whole ms is up to a third of a sample off; that is rounding, not irregularity."""
    time = np.round(np.arange(9000) / 700, 3)
    voltage = np.random.default_rng(1).normal(size=9000)
    record = Record.from_run(with_input(run, time=time, voltage=voltage))
    assert record.caveats == ()
    assert record.drive.interval == pytest.approx(1 / 700, rel=1e-3 / 12)  # half a ms at either end of 12.9 s


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"angle": np.full(30, 3.0)}, "the angle is constant (3 deg): check the sensor"),
        (
            {"angle": np.full(30, np.nan)},
            f"0 readable angle samples; at least {MINIMUM_FRAMES} are needed: record longer",
        ),
    ],
)
def test_useless_angles_are_refused(change: dict[str, object], message: str, run: Run) -> None:
    """What, which value, which limit, what to do, with the name of the run in front."""
    with pytest.raises(EstimationError) as told:
        Record.from_run(with_frames(run, time=np.arange(30) / 60, **change))
    assert str(told.value) == f"{run.name}: {message}"


def test_the_fewest_frames_are_enough_and_one_less_is_not(run: Run) -> None:
    """The limit that the message names is the limit."""
    few = slice(100, 100 + MINIMUM_FRAMES)
    cut = with_frames(run, time=run.angle.time[few], angle=run.angle.angle[few])
    assert len(Record.from_run(cut).stamp) == MINIMUM_FRAMES
    with pytest.raises(
        EstimationError, match=f"{MINIMUM_FRAMES - 1} readable angle samples; at least {MINIMUM_FRAMES}"
    ):
        Record.from_run(with_frames(cut, time=cut.angle.time[1:], angle=cut.angle.angle[1:]))


def test_a_constant_input_is_refused(run: Run) -> None:
    """The likeliest reason is the wrong column, and the message says so."""
    with pytest.raises(EstimationError) as told:
        Record.from_run(with_input(run, voltage=np.full(8500, 0.25)))
    assert str(told.value) == f"{run.name}: the input is constant (0.25 V): check the input column or channel"


def test_logs_that_do_not_overlap_are_refused(run: Run) -> None:
    """On a common clock a measured voltage that covers no frame explains nothing."""
    apart = with_frames(with_input(run, commanded=False), time=run.angle.time + 100.0)
    with pytest.raises(EstimationError, match=r"record longer|overlap|no frame"):
        Record.from_run(apart)


def test_a_clock_that_stands_still_is_refused(run: Run) -> None:
    """All stamps equal: there is no time to fit anything in."""
    with pytest.raises(EstimationError, match="stamp"):
        Record.from_run(with_frames(run, time=np.zeros(len(run.angle.time))))


def test_a_constant_input_with_an_unreadable_sample_is_refused(run: Run) -> None:
    """NaN is not a change of the voltage."""
    voltage = np.full(8500, 0.25)
    voltage[5] = np.nan
    with pytest.raises(EstimationError, match="the input is constant"):
        Record.from_run(with_input(run, voltage=voltage))
