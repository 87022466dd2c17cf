"""freqid capture through a sound interface, as it is seen from the command line; the interface is a simulated one."""

from __future__ import annotations

import io
import json
import shutil
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from freqid.capture.sound import recording_files
from freqid.cli import main
from freqid.cli.live_line import live_text
from freqid.rig_template import rig_sheet_text
from freqid.stages.excite import ExciteSettings, design_excitation
from freqid.stages.sound_capture import Live
from freqid.test_folder import TestFolder

Change = Callable[[str, str], None]
LIBRARY = '''
class PortAudioError(Exception):
    """As the real one."""

def query_hostapis():
    return ({"name": "ALSA"},)

def query_devices():
    return [{"name": "USB Interface", "hostapi": 0, "default_samplerate": 96000.0,
             "max_output_channels": 2, "max_input_channels": INPUTS}]

def check_output_settings(**words):
    if words["samplerate"] == 96000.0:
        return
    if REFUSES:
        raise PortAudioError("Invalid sample rate")

check_input_settings = check_output_settings

def Stream(**words):
    raise PortAudioError("must not be opened")
'''


@pytest.fixture(scope="module")
def designed(tmp_path_factory: pytest.TempPathFactory) -> TestFolder:
    """A folder of the vane on a sound interface of 4 kHz with a profile of six seconds, to be copied."""
    made = TestFolder(tmp_path_factory.mktemp("sound") / "a vane é")
    made.path.mkdir()
    text = rig_sheet_text()
    for old, new in (("sample_rate = 1000.0", "sample_rate = 4000.0"), ("sample_rate = 60.0", "sample_rate = 4000.0"),
                     ('hold = "zero-order"', 'hold = "smooth"'), ("exposure = 0.004", "exposure = 0.0")):  # fmt: skip
        text = text.replace(old, new)
    made.rig.write_text(text, encoding="utf-8")
    design_excitation(made, ExciteSettings(duration=6.0, band=(1.0, 8.0)))
    return made


@pytest.fixture
def sounding(designed: TestFolder, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> TestFolder:
    """A copy; nobody sits at the terminal, and the simulated interface is fast."""
    monkeypatch.setenv("FREQID_SIMULATED_PACE", "fast")
    monkeypatch.setattr(sys, "stdin", io.StringIO(""))
    copy = TestFolder(tmp_path / designed.path.name)
    shutil.copytree(designed.path, copy.path)
    return copy


@pytest.fixture
def change(sounding: TestFolder) -> Change:
    """Replace text that stands in the rig sheet."""

    def replace(old: str, new: str) -> None:
        text = sounding.rig.read_text(encoding="utf-8")
        assert old in text
        sounding.rig.write_text(text.replace(old, new), encoding="utf-8")

    return replace


@pytest.fixture
def library(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Callable[..., None]:
    """Put a sound library in place with one device of so many inputs, which may refuse the rate."""
    place = tmp_path / "library"
    place.mkdir()
    monkeypatch.setenv("PYTHONPATH", str(place))

    def put(*, inputs: int = 2, refuses: bool = False, text: str = LIBRARY) -> None:
        head = f"INPUTS, REFUSES = {inputs}, {refuses}\n"
        (place / "sounddevice.py").write_text(head + text, encoding="utf-8")

    return put


def test_run_and_estimate_through_the_simulated_interface(
    sounding: TestFolder, capsys: pytest.CaptureFixture[str]
) -> None:
    """No cautions for the simulated rig; the JSON tells what was verified, and the model is that of [simulated]."""
    assert main(["capture", str(sounding.path), "--device", "simulated", "--seed", "4", "--json"]) == 0
    out, err = capsys.readouterr()
    told = json.loads(out)
    assert "Before the rig moves" not in err
    assert (told["run"], told["complete"], told["reason"], told["simulated"]) == ("response-001", True, None, True)
    assert told["verification"]["problems"] == [] and told["input"]["commanded"] is False
    assert main(["estimate", str(sounding.path), "--json"]) == 0
    found = json.loads(capsys.readouterr().out)["parameters"]
    for name, true in (("gain", 12.1), ("natural_frequency", 3.02), ("damping_ratio", 0.118), ("delay", 0.021)):
        # one seed: within four of the standard uncertainties stated (1 in 16 000 by chance)
        assert abs(found[name]["value"] - true) < 4 * found[name]["standard_uncertainty"]
    assert found["delay"]["includes_clock_offset"] is False


def test_every_run_of_a_series_is_printed(sounding: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """A table for each, with what was verified."""
    assert main(["capture", str(sounding.path), "--device", "simulated", "--runs", "2"]) == 0
    out = capsys.readouterr().out
    assert out.count("verified  yes") == 2 and "response-002, simulated" in out


def test_device_is_asked_before_the_cautions_and_nothing_sounds_unarmed(
    sounding: TestFolder, library: Callable[..., None], capsys: pytest.CaptureFixture[str]
) -> None:
    """Unknown device: no cautions. A known one: cautions, what is about to happen, and no stream without --armed."""
    library()
    assert main(["capture", str(sounding.path), "--device", "mixer"]) == 1
    err = capsys.readouterr().err
    assert "unknown device 'mixer': there are 0 'USB Interface' (ALSA)" in err and err.count("\n") == 1
    assert main(["capture", str(sounding.path), "--device", "usb"]) == 1
    err = capsys.readouterr().err
    assert "hard-wired stop" in err
    assert "1 run at 1 times the designed voltage on 'USB Interface' (ALSA): drive on output 1, loopback on" in err
    assert err.splitlines()[-1].startswith("freqid: not armed: nothing was sent")
    assert not sounding.runs.exists()


def test_one_input_is_warned_of(
    sounding: TestFolder, library: Callable[..., None], capsys: pytest.CaptureFixture[str]
) -> None:
    """Without a loopback the consequences are said before anything moves."""
    library(inputs=1)
    assert main(["capture", str(sounding.path), "--device", "0"]) == 1
    assert "note: no loopback: the voltage that is really there is not recorded" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (["--device", "0", "--armed"], "refuses 1 output channel of float32 at 4000 Hz (Invalid sample rate); it"
                                       " prefers 96000 Hz"),
        (["--device", "0", "--armed", "--angle-channel", "5"], "has 2 input channels, --angle-channel 5 is wanted"),
    ],
)  # fmt: skip
def test_refusal_of_the_device_is_one_line(
    words: list[str], expected: str, sounding: TestFolder, library: Callable[..., None], capsys: Any
) -> None:
    """Rate and channels are checked before the cautions."""
    library(refuses=True)
    assert main(["capture", str(sounding.path), *words]) == 1
    err = capsys.readouterr().err
    assert expected in err and err.count("\n") == 1


def test_stream_that_cannot_be_opened_is_told(
    sounding: TestFolder, library: Callable[..., None], capsys: pytest.CaptureFixture[str]
) -> None:
    """The device agreed and then refused: one last line, nothing left in runs/."""
    library()
    assert main(["capture", str(sounding.path), "--device", "0", "--armed"]) == 1
    assert "could not be started: must not be opened" in capsys.readouterr().err.splitlines()[-1]
    assert list(sounding.runs.iterdir()) == []


def test_no_portaudio_names_the_other_way(
    sounding: TestFolder, library: Callable[..., None], capsys: pytest.CaptureFixture[str]
) -> None:
    """What to install, and that the exported profile can be played by other means."""
    library(text="raise OSError('PortAudio library not found')\n")
    assert main(["capture", str(sounding.path), "--device", "0", "--armed"]) == 1
    err = capsys.readouterr().err
    assert "PortAudio library not found; install the PortAudio library" in err
    assert "play the exported profile with your own output and use `freqid import`" in err and err.count("\n") == 1


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ('hold = "smooth"', 'hold = "zero-order"', '[output] hold = "zero-order": a sound interface gives a smooth'),
        ("full_scale = 45.0", "#", "[angle_sensor] full_scale is missing"),
        ("exposure = 0.0", "exposure = 0.0002", "[angle_sensor] exposure = 0.0002: a converter takes the angle at an"),
        ("sample_rate = 4000.0  ", "sample_rate = 4800.0  ", "designed for 4000 Hz, [output] sample_rate is 4800 Hz"),
        ("bias = 0.0", "bias = 0.5", "was designed about 0 V, [limits] bias is 0.5 V"),
        ("voltage = 5.0", "voltage = 1.0", "the limit is ±1 V"),
    ],
)
def test_sheet_that_does_not_fit_is_refused(
    old: str, new: str, expected: str, sounding: TestFolder, change: Change, capsys: pytest.CaptureFixture[str]
) -> None:
    """Key, value and what to write, before any device is asked."""
    change(old, new)
    assert main(["capture", str(sounding.path), "--device", "simulated"]) == 1
    err = capsys.readouterr().err
    assert expected in err and err.count("\n") == 1
    assert not sounding.runs.exists()


def test_no_room_is_told_before_anything_sounds(
    sounding: TestFolder, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """What the recording needs and what is free."""
    monkeypatch.setattr(recording_files, "room_beside", lambda path: 100_000)
    assert main(["capture", str(sounding.path), "--device", "simulated"]) == 1
    err = capsys.readouterr().err
    assert "MB are needed for the recording, 0.1 MB are free" in err and err.count("\n") == 1
    assert list(sounding.runs.iterdir()) == []


def test_calibration_says_what_to_write(sounding: TestFolder, capsys: pytest.CaptureFixture[str]) -> None:
    """A meter that reads twice what the sheet expects: full scale is twice as much; the sheet stays as it is."""
    before = sounding.rig.read_bytes()
    assert main(["capture", str(sounding.path), "--device", "simulated", "--calibrate", "--json"]) == 0
    expected = json.loads(capsys.readouterr().out)
    assert expected["reading"] is None and expected["output_full_scale"] is None
    # a tenth of 5 V as an amplitude, unless the slew limit of 500 V/s asks for less: 2 pi 40 Hz 0.5 V = 126 V/s
    assert expected["expected_reading"] == pytest.approx(0.5 / 2**0.5, rel=1e-12)
    reads = str(2 * expected["expected_reading"])
    assert main(["capture", str(sounding.path), "--device", "simulated", "--calibrate", "--reads", reads]) == 0
    out, err = capsys.readouterr()
    assert "output full_scale" in out and "Nothing was changed" in err
    # four digits are printed exactly: float32 digits over 4000 samples average to far less
    assert "full_scale = 20\n" in err and "loopback_full_scale = 20\n" in err
    assert sounding.rig.read_bytes() == before and not sounding.runs.exists()


def test_live_line_shows_the_way_to_the_stops() -> None:
    """Time left, peak voltage, angle as a bar, what is allowed, clipped samples and losses, in one line."""
    state = Live(left=12.34, fraction=0.4, peak_voltage=2.5, angle=-13.5, largest_angle=24.0, angle_limit=27.0,
                 clipped=3, flagged=1)  # fmt: skip
    text = live_text(state, "deg")
    assert text == ("  12.3 s left  peak 2.5 V  angle -13.50 deg [######......] largest 24 of 27 CLOSE  clipped 3"
                    "  over/underruns 1")  # fmt: skip
