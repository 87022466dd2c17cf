"""A long run shortened tells the same as the whole one, and only the noise above the band is lost."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from freqid.estimate import long_run
from freqid.estimate.identification import Identification, identify
from freqid.estimate.long_run import read_for_estimate
from freqid.records import AngleStream, InputStream, Periodicity, Run
from freqid.run_file import EvenRate, read_run, write_run_in_blocks
from freqid.second_order import PARAMETER_ORDER, SecondOrder
from freqid.test_folder import TestFolder

VANE = SecondOrder(gain=12.0, natural_frequency=3.0, damping_ratio=0.12, delay=0.02)
SAMPLE_RATE, PERIOD, PERIODS = 480.0, 10.0, 30
LINES = np.arange(3, 100, 6) / PERIOD
NOISE = 0.5  # deg rms up to half the sample rate


@pytest.fixture(autouse=True)
def even_short_runs_are_long(monkeypatch: pytest.MonkeyPatch) -> None:
    """A record small enough to be estimated whole as well, and read in more than one chunk."""
    monkeypatch.setattr(long_run, "LONGEST_WHOLE", 1000)
    monkeypatch.setattr(long_run, "CHUNK", 7000)


@pytest.fixture
def folder(tmp_path: Path) -> TestFolder:
    path = tmp_path / "an hour é"
    path.mkdir()
    return TestFolder(path)


def multisine(time: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Voltage and angle of the vane in its steady state, exact."""
    phases = np.pi * np.arange(len(LINES)) ** 2 / len(LINES)
    waves = 0.5 * np.exp(1j * (2 * np.pi * np.outer(time, LINES) + phases))
    return waves.sum(axis=1).real, (waves @ VANE.response(LINES)).real


def written(folder: TestFolder, *, seed: int, periodic: bool = True, noise: float = NOISE) -> Path:
    """A run of `PERIODS` periods with noise on both channels."""
    time = np.arange(int(PERIOD * PERIODS * SAMPLE_RATE)) / SAMPLE_RATE
    voltage, angle = multisine(time)
    rng = np.random.default_rng(seed)
    voltage = voltage + 1e-4 * rng.standard_normal(len(time))
    angle = angle + noise * rng.standard_normal(len(time))
    period = Periodicity(period=PERIOD, lines=LINES, start=0.0, stop=PERIOD * PERIODS)
    facts = Run(
        name=folder.next_run_name("response"),
        kind="response",
        input=InputStream(
            time=np.empty(0), voltage=np.empty(0), hold="smooth", commanded=False,
            periodicity=period if periodic else None,
        ),
        angle=AngleStream(time=np.empty(0), angle=np.empty(0), angle_unit="deg", exposure=0.0, stamp="end"),
        common_clock=True,
    )

    def blocks() -> Iterator[tuple[np.ndarray, np.ndarray]]:
        for begin in range(0, len(time), 50_000):
            yield voltage[begin : begin + 50_000], angle[begin : begin + 50_000]

    return write_run_in_blocks(folder, facts, blocks(), rate=EvenRate(sample_rate=SAMPLE_RATE), samples=len(time))


def standard_uncertainties(found: Identification) -> np.ndarray:
    quantities = found.model.parameters
    return np.array([quantities[name].standard_uncertainty for name in PARAMETER_ORDER])  # type: ignore[union-attr]


def test_shortened_run_tells_the_same_as_the_whole(folder: TestFolder) -> None:
    """Averaged over periods and thinned, the parameters move by less than half their uncertainty, which stays the same.

    The periods' mean is all that the fit takes; the block means cost 1 - sinc^2(9.9 Hz * 3 / 480 Hz) = 1.3 % of the
    information at the top of the band, the filter some 0.3 s of 100 s at the ends. An estimate without 4 % of the
    information moves by 0.2 uncertainties rms. The uncertainties rest on some hundreds of degrees of freedom: 20 %.
    """
    path = written(folder, seed=1)
    run = read_for_estimate(path)
    assert len(run.angle.angle) < 0.1 * PERIOD * PERIODS * SAMPLE_RATE
    whole, short = identify(read_run(path)), identify(run)
    deviation = standard_uncertainties(whole)
    assert np.all(np.abs(short.model.model.vector - whole.model.model.vector) < 0.5 * deviation)
    np.testing.assert_allclose(standard_uncertainties(short), deviation, rtol=0.2)
    assert whole.response.method == short.response.method == "periodic"
    np.testing.assert_allclose(
        short.response.response, whole.response.response, atol=4 * float(np.max(np.sqrt(whole.response.variance)))
    )


def test_noiseless_run_loses_nothing_to_the_shortening(folder: TestFolder) -> None:
    """Without noise on the angle the true parameters come out.

    What is left is the noise of 1e-4 V, averaged over 144 000 samples, and the straight lines of the shortened voltage:
    128/1575 sin^8(pi / 16) = 2e-7 and the first image, 1 / 15^2 of a line, at 150 Hz let through by the rig to
    (3 / 150)^2: 2e-6. Bound: 1e-4 of each value.
    """
    found = identify(read_for_estimate(written(folder, seed=2, noise=0.0)))
    np.testing.assert_allclose(found.model.model.vector, VANE.vector, rtol=1e-4)


def test_intervals_of_shortened_runs_hold_the_truth(folder: TestFolder) -> None:
    """Ten seeds: of 40 intervals of 95 %, at least 33 hold the truth (fewer has a chance of 1e-3, binomial)."""
    held = 0
    for seed in range(10):
        found = identify(read_for_estimate(written(folder, seed=100 + seed))).model
        for truth, quantity in zip(VANE.vector, found.parameters.values(), strict=True):
            assert quantity is not None
            held += quantity.interval_95[0] <= truth <= quantity.interval_95[1]
    assert held >= 33


def test_any_other_voltage_is_thinned_only(folder: TestFolder) -> None:
    """Without a known period nothing is averaged, the duration stays, and the answer agrees with that of the whole."""
    path = written(folder, seed=3, periodic=False)
    run = read_for_estimate(path)
    assert run.input.periodicity is None and "neighbouring periods" not in run.notes[-1]
    assert run.angle.time[-1] - run.angle.time[0] > 0.98 * PERIOD * PERIODS
    whole, short = identify(read_run(path)), identify(run)
    difference = np.abs(short.model.model.vector - whole.model.model.vector)
    assert np.all(difference < 0.5 * standard_uncertainties(whole))


def test_shortened_run_says_what_was_done_and_whence_it_came(folder: TestFolder) -> None:
    """A note names blocks and averaged periods; sha256, facts and read-only file are those of the raw run."""
    path = written(folder, seed=4)
    run = read_for_estimate(str(path))
    assert run.file_sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert "means over 3 samples, 3 neighbouring periods averaged into one (30 of them into 10)" in run.notes[-1]
    assert run.name == "response-001" and run.common_clock and run.input.periodicity is not None
    assert run.input.periodicity.period == PERIOD


def test_short_and_uneven_runs_are_read_as_they_are(folder: TestFolder, monkeypatch: pytest.MonkeyPatch) -> None:
    """Below the limit the run is the raw one to the last bit."""
    monkeypatch.setattr(long_run, "LONGEST_WHOLE", 10_000_000)
    path = written(folder, seed=5)
    raw, read = read_run(path), read_for_estimate(path)
    np.testing.assert_array_equal(read.angle.angle, raw.angle.angle)
    assert read.notes == raw.notes and read.file_sha256 == raw.file_sha256


@pytest.mark.parametrize(("period", "block"), [(4800, 25), (4810, 26), (4813, None)])
def test_a_few_periods_are_thinned_by_blocks_that_divide_them(
    folder: TestFolder, period: int, block: int | None
) -> None:
    """Too few periods to average: blocks divide the period (480 Hz, band to 1.1 Hz: at most 27 samples), or none is
    taken and the run is read whole; the answer holds the vane either way.
    """
    lines = np.arange(1, 12, 2) / (period / SAMPLE_RATE)
    time = np.arange(3 * period) / SAMPLE_RATE
    waves = np.exp(1j * (2 * np.pi * np.outer(time, lines) + np.arange(len(lines)) ** 2))
    rng = np.random.default_rng(2)
    known = Periodicity(period=period / SAMPLE_RATE, lines=lines, start=0.0, stop=3 * period / SAMPLE_RATE)
    slow = replace(VANE, natural_frequency=0.5)
    facts = Run(
        name="response-001", kind="response",
        input=InputStream(time=np.empty(0), voltage=np.empty(0), hold="smooth", commanded=False, periodicity=known),
        angle=AngleStream(time=np.empty(0), angle=np.empty(0), angle_unit="deg", exposure=0.0, stamp="end"),
        common_clock=True,
    )  # fmt: skip
    angle = (waves @ slow.response(lines)).real + NOISE * rng.standard_normal(len(time))
    path = write_run_in_blocks(folder, facts, [(waves.sum(axis=1).real, angle)],
                               rate=EvenRate(sample_rate=SAMPLE_RATE, start=0.0), samples=len(time))  # fmt: skip
    run = long_run.read_for_estimate(path)
    np.testing.assert_allclose(np.diff(run.input.time), (block or 1) / SAMPLE_RATE, rtol=1e-9)
    for name, quantity in identify(run).model.parameters.items():
        assert quantity is not None
        # a chance of 6e-5 each to lie outside four standard uncertainties; voltages are kept as float32
        assert abs(quantity.value - getattr(slow, name)) < 4 * quantity.standard_uncertainty
