"""Awkward logs become runs with the same samples, and the notes tell what was chosen and converted."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from excitation.hdf5_file import write_hdf5
from excitation.profile import Profile
from freqid.capture.logs import ImportSettings, RigFacts, run_from_one_log, run_from_profile, run_from_two_logs
from freqid.errors import LogError
from freqid.records import Run

N = 200
INDEX = np.arange(N)
VOLTAGE = np.sin(0.21 * INDEX) + 0.4 * np.cos(0.37 * INDEX)
ANGLE = 12 * np.sin(0.21 * INDEX - 0.4)
TEXT_PRECISION = 5.1e-7  # numbers are written with six decimals: half a unit of the last is 5e-7, rounding on reading


def rig(**changes: object) -> RigFacts:
    """The vane's rig sheet, with changes."""
    facts: dict[str, object] = {
        "angle_unit": "deg",
        "angle_sample_rate": 60.0,
        "exposure": 0.004,
        "stamp": "end",
        "output_sample_rate": 1000.0,
        "output_hold": "zero-order",
        "output_full_scale": 10.0,
        "angle_full_scale": 45.0,
    }
    return RigFacts(**{**facts, **changes})  # type: ignore[arg-type]


def write(path: Path, header: str, *columns: object, separator: str = ",", decimal: str = ".") -> Path:
    """A text log; floats are written with six decimals."""
    rows = [
        separator.join(f"{cell:.6f}".replace(".", decimal) if isinstance(cell, float) else str(cell) for cell in row)
        for row in zip(*columns, strict=True)  # type: ignore[call-overload]
    ]
    path.write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
    return path


def floats(values: NDArray[np.float64]) -> list[float]:
    """Plain Python numbers."""
    return [float(value) for value in values]


def one(path: Path, facts: RigFacts | None = None, **choices: object) -> Run:
    """Import one log."""
    return run_from_one_log(path, settings=ImportSettings(**choices), rig=facts or rig())  # type: ignore[arg-type]


def told(run: Run, words: str) -> bool:
    """Whether a note holds the words."""
    return any(words in note for note in run.notes)


def test_german_log_with_frame_numbers(tmp_path: Path) -> None:
    """Decimal commas, semicolons and frame numbers: time is frame / rate, lost frames leave a gap."""
    frames = [n + 1000 + (3 if n > 50 else 0) for n in INDEX]
    columns = (frames, floats(VOLTAGE), floats(ANGLE))
    path = write(tmp_path / "Prüflauf 1.csv", "Bild;Spannung (V);Winkel (°)", *columns, separator=";", decimal=",")
    run = one(path, sample_rate=60.0)
    np.testing.assert_allclose(run.angle.time, np.array(frames) / 60.0, rtol=1e-15)
    np.testing.assert_allclose(run.angle.angle, ANGLE, atol=TEXT_PRECISION)
    np.testing.assert_allclose(run.input.voltage, VOLTAGE, atol=TEXT_PRECISION)
    assert run.common_clock and told(run, "frame numbers") and run.angle.angle_unit == "deg"
    with pytest.raises(LogError, match="--sample-rate"):
        one(path, time_column="Bild")


def test_converter_log_in_ms_since_midnight_and_mv(tmp_path: Path) -> None:
    """Milliseconds since midnight stay on their clock, millivolts become volts, the notes say so."""
    stamps = [43_200_000 + n for n in INDEX]
    volts = write(tmp_path / "converter.csv", "t (ms),U (mV)", stamps, floats(1000 * VOLTAGE))
    camera = write(tmp_path / "camera.csv", "time_s,angle_rad", floats(INDEX / 60), floats(np.radians(ANGLE)))
    run = run_from_two_logs(volts, camera, settings=ImportSettings(), rig=rig())
    # 43200 s + n ms as doubles: one rounding of 43200, 2^-37 s
    np.testing.assert_allclose(run.input.time, 43200 + INDEX / 1000, rtol=0, atol=2.0**-36)
    np.testing.assert_allclose(run.input.voltage, VOLTAGE, atol=TEXT_PRECISION / 1000 + 1e-15)
    np.testing.assert_allclose(run.angle.angle, ANGLE, atol=np.degrees(TEXT_PRECISION))
    assert not run.common_clock and run.input.hold == "zero-order"
    assert (
        told(run, "from mV to V") and told(run, "from rad (from the header) to deg") and told(run, "output's 1000 Hz")
    )
    assert [origin.source for origin in run.origins] == ["converter.csv", "camera.csv"]


@pytest.mark.parametrize("zone", ["", "Z", "+02:00"])
def test_iso_stamps(tmp_path: Path, zone: str) -> None:
    """ISO 8601 stamps become seconds from the first, over midnight too, with and without a zone."""
    start = datetime(2024, 2, 28, 23, 59, 59, tzinfo=UTC)
    stamps = [(start + timedelta(milliseconds=16 * n)).strftime("%Y-%m-%dT%H:%M:%S.%f") + zone for n in range(N)]
    run = one(write(tmp_path / "a.csv", "timestamp,u,y", stamps, floats(VOLTAGE), floats(ANGLE)))
    np.testing.assert_allclose(run.angle.time, 0.016 * INDEX, rtol=1e-12, atol=1e-12)
    assert told(run, "in s from the first")


def test_clock_times_and_their_midnight(tmp_path: Path) -> None:
    """Clock times are seconds since midnight; passing midnight is refused by that name."""
    stamps = [f"12:00:{n * 0.016:06.3f}" for n in INDEX]
    run = one(write(tmp_path / "a.csv", "Zeit;u;y", stamps, floats(VOLTAGE), floats(ANGLE), separator=";"))
    np.testing.assert_allclose(run.angle.time, 43200 + 0.016 * INDEX, rtol=0, atol=1e-10)
    wrapped = [(86_399_000 + 16 * n) % 86_400_000 for n in range(N)]
    path = write(tmp_path / "b.csv", "t_ms,u,y", wrapped, floats(VOLTAGE), floats(ANGLE))
    with pytest.raises(LogError, match=r"b\.csv: line 65: the time passes midnight"):
        one(path)


def test_wrong_time_unit_is_asked_for(tmp_path: Path) -> None:
    """Steps of 16.7 with a 60 Hz sensor are milliseconds: refused until the unit is given, then right."""
    path = write(tmp_path / "a.csv", "t,u,y", floats(INDEX * 50 / 3), floats(VOLTAGE), floats(ANGLE))
    with pytest.raises(LogError, match=r"16\.6667, taken as s, but the nominal rate is 60 Hz; give --time-unit"):
        one(path)
    # written to 1e-6 ms: half a unit of the last decimal is 5e-10 s
    np.testing.assert_allclose(one(path, time_unit="ms").angle.time, INDEX / 60, atol=5.1e-10)


def test_repeated_and_missing_stamps(tmp_path: Path) -> None:
    """Rounded stamps that repeat are kept and counted; rows without a stamp or an angle are counted too."""
    stamps = [f"{(n // 2) / 30:.3f}" for n in INDEX]
    stamps[7] = ""
    angles = [f"{value:.6f}" for value in ANGLE]
    angles[20] = "nan"
    run = one(write(tmp_path / "a.csv", "t,u,y", stamps, floats(VOLTAGE), angles))
    assert run.angle.time.size == N - 1 and np.isnan(run.angle.angle).sum() == 1
    # 100 pairs, one of them lost its second stamp
    assert told(run, "99 stamps repeat") and told(run, "1 rows without a time") and told(run, "1 of 199 samples")


@pytest.mark.parametrize(("unit", "turn"), [("deg", 360.0), ("rad", 2 * np.pi)])
def test_wraps_are_undone(tmp_path: Path, unit: str, turn: float) -> None:
    """An angle reported within one turn comes back without jumps, on the turn most samples are on."""
    angle = (ANGLE + 5) * turn / 360
    path = write(tmp_path / "a.csv", f"t,u,angle [{unit}]", floats(INDEX / 60), floats(VOLTAGE), floats(angle % turn))
    run = one(path, rig(angle_unit=unit))
    np.testing.assert_allclose(run.angle.angle, angle, atol=TEXT_PRECISION)
    assert told(run, f"{np.count_nonzero(np.diff(angle // turn))} jumps of the angle by a whole turn undone")


def test_columns_asked_for_and_guessed(tmp_path: Path) -> None:
    """A column is found by exact name, any case, whole word, beginning or number; a doubt is an error that lists."""
    header = "Time (s);Angle set;Angle read;Drive level"
    columns = (floats(INDEX / 60), floats(ANGLE / 2), floats(ANGLE), floats(VOLTAGE))
    path = write(tmp_path / "a.csv", header, *columns, separator=";")
    for request in ("Angle read", "angle READ", "read", "angle r", "3"):
        run = one(path, angle_column=request, input_column="Drive level")
        np.testing.assert_allclose(run.angle.angle, ANGLE, atol=TEXT_PRECISION)
    with pytest.raises(
        LogError, match=r'which column is the angle\? Give --angle-column .* 2 "Angle set" -2\.3'
    ) as fault:
        one(path)
    assert '4 "Drive level"' in str(fault.value) and "\n" not in str(fault.value)
    with pytest.raises(LogError, match="fits columns 2 and 3"):
        one(path, angle_column="angle")
    with pytest.raises(LogError, match='no column "pose"'):
        one(path, angle_column="pose")
    with pytest.raises(LogError, match="serves as another stream"):
        one(path, angle_column="3", input_column="3")


@pytest.mark.parametrize("kind", ["int16", "int32", "float32"])
def test_wav_in_volts_and_angle(tmp_path: Path, kind: str) -> None:
    """A WAV's channels become volts and angles by the rig's full scales, at the file's rate."""
    from scipy.io import wavfile

    scale = {"int16": 2.0**15, "int32": 2.0**31, "float32": 1.0}[kind]
    data = np.column_stack([VOLTAGE / 10, ANGLE / 45]) * scale
    path = tmp_path / "takt ä.wav"
    wavfile.write(path, 8000, (data if kind == "float32" else np.round(data)).astype(kind))
    run = one(path, input_column="1", angle_column="2")
    step = {"int16": 2.0**-16, "int32": 2.0**-32, "float32": 2.0**-24}[kind]  # rounding, of full scale
    np.testing.assert_allclose(run.input.voltage, VOLTAGE, atol=10 * step * 1.01)
    np.testing.assert_allclose(run.angle.angle, ANGLE, atol=45 * step * 1.01)
    np.testing.assert_allclose(run.angle.time, INDEX / 8000, rtol=1e-15)
    with pytest.raises(LogError, match="which column is the input"):
        one(path)


def test_wav_of_24_bits(tmp_path: Path) -> None:
    """24-bit samples are read at full scale 1: the largest is 1 - 2^-23, the smallest -1."""
    import wave

    counts = np.concatenate([[2**23 - 1, -(2**23)], np.round(VOLTAGE[:60] * 2**20)]).astype(np.int64)
    path = tmp_path / "a.wav"
    with wave.open(str(path), "wb") as file:
        file.setnchannels(1)
        file.setsampwidth(3)
        file.setframerate(1000)
        file.writeframes(b"".join(int(count).to_bytes(3, "little", signed=True) for count in counts))
    from freqid.capture.logs import open_log

    np.testing.assert_array_equal(open_log(path).columns[0].numbers, counts / 2.0**23)


def test_hdf5_log(tmp_path: Path) -> None:
    """Datasets become columns with their units; the file is known by its content, whatever its ending."""
    path = tmp_path / "log.dat"
    datasets = {"time": (INDEX * 16.0, "ms"), "u": (VOLTAGE, "V"), "angle": (np.radians(ANGLE), "rad")}
    write_hdf5(path, datasets=datasets, attributes={"made_by": "a logger"})
    run = one(path)
    np.testing.assert_allclose(run.angle.time, INDEX * 0.016, rtol=1e-15)
    np.testing.assert_allclose(run.angle.angle, ANGLE, rtol=1e-14, atol=1e-14)  # two conversions, a few roundings
    np.testing.assert_array_equal(run.input.voltage, VOLTAGE)


def test_hold_decisions(tmp_path: Path) -> None:
    """Held at the output's rate or where steps show; smooth otherwise; as asked above all."""
    plain = (floats(INDEX / 100), floats(VOLTAGE), floats(ANGLE))
    path = write(tmp_path / "a.csv", "t,u,y", *plain)
    assert one(path).input.hold == "smooth"
    assert one(path, rig(output_sample_rate=100.0)).input.hold == "zero-order"
    assert one(path, rig(output_sample_rate=100.0, output_hold="smooth")).input.hold == "smooth"
    assert one(path, hold="zero-order").input.hold == "zero-order"
    steps = write(tmp_path / "b.csv", "t,u,y", plain[0], floats(np.repeat(VOLTAGE[::4], 4)), plain[2])
    assert one(steps).input.hold == "zero-order"
    coarse = write(tmp_path / "c.csv", "t,u,y", plain[0], floats(np.round(np.sin(INDEX / 60), 1)), plain[2])
    assert one(coarse).input.hold == "smooth"


def test_designed_profile_with_angle_log(tmp_path: Path) -> None:
    """The profile is the input sample by sample, commanded, with its own periodicity and no common clock."""
    period = np.sin(2 * np.pi * np.arange(500) / 500)
    profile = Profile(
        voltage=np.concatenate([np.zeros(250), np.tile(period, 3), np.zeros(250)]),
        sample_rate=500.0,
        hold="zero-order",
        bias=0.0,
        kind="multisine",
        period_samples=500,
        lines=np.array([1.0]),
        steady_start=250,
        steady_stop=1750,
    )
    path = write(tmp_path / "camera.csv", "t,angle", floats(INDEX / 60), floats(ANGLE))
    run = run_from_profile(profile, path, settings=ImportSettings(), rig=rig(), profile_sha256="ab")
    np.testing.assert_array_equal(run.input.voltage, profile.voltage)
    assert run.input.commanded and not run.common_clock and run.origins[0].sha256 == "ab"
    assert run.input.periodicity is not None and run.input.periodicity.n_periods == 3
    assert (run.input.periodicity.start, run.input.periodicity.stop) == (0.5, 3.5)


def test_profile_csv_is_an_input_log(tmp_path: Path) -> None:
    """An exported voltage with the header time_s,voltage_V needs no options; a lone angle column takes the rate."""
    volts = write(tmp_path / "profile.csv", "time_s,voltage_V", floats(INDEX / 1000), floats(VOLTAGE))
    angle = write(tmp_path / "angle.txt", "whatever", floats(ANGLE))
    run = run_from_two_logs(volts, angle, settings=ImportSettings(sample_rate=60.0), rig=rig())
    np.testing.assert_allclose(run.angle.time, INDEX / 60, rtol=1e-15)
    np.testing.assert_allclose(run.input.time, INDEX / 1000, rtol=1e-15)


def test_run_is_read_only_and_periodicity_only_for_response(tmp_path: Path) -> None:
    """The arrays of a run cannot be changed; a periodic input is told for a response run alone."""
    voltage = np.tile(np.sin(2 * np.pi * np.arange(50) / 50), 4)
    path = write(tmp_path / "a.csv", "t,u,y", floats(INDEX / 100), floats(voltage), floats(ANGLE))
    run = one(path)
    assert run.input.periodicity is not None and run.input.periodicity.n_periods == 4
    assert run.input.periodicity.period == pytest.approx(0.5, rel=1e-5)  # stamps to 1e-6 over 2 s
    assert one(path, kind="step").input.periodicity is None
    for array in (run.input.time, run.input.voltage, run.angle.time, run.angle.angle, run.input.periodicity.lines):
        assert not array.flags.writeable


def test_torsion_log_with_columns_asked_for(open_data: Path) -> None:
    """The torsion log is refused with its columns listed, and read once two of them are named."""
    path = open_data / "torsion_oscillator" / "run_b.csv"
    with pytest.raises(LogError, match=r'3 "Angle, Ch P2 \(rad\) Run #14" \[rad\] -0.02'):
        one(path)
    run = one(path, rig(angle_unit="rad"), input_column="3", angle_column="Angle, Ch P1")
    assert run.angle.time.size == 44813 and run.input.time.size == 44811  # the last two rows have no driver angle
    assert told(run, "no voltage") and run.input.hold == "smooth" and run.input.periodicity is None


def test_motor_log_needs_no_options(open_data: Path) -> None:
    """Columns t, u, y are told apart by their names, and the binary sequence is seen to be held."""
    run = one(open_data / "dc_motor" / "binary_sequence.csv", rig(angle_sample_rate=50.0, output_sample_rate=50.0))
    assert run.input.hold == "zero-order" and run.input.time.size == 4093 and run.input.periodicity is None
