"""freqid devices: what the system reports of its sound interfaces, or why it cannot.

Devices are asked for in a process of their own, so a sound library for the test stands in a folder on its path.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import pytest

from freqid.cli import main

Offer = Callable[[str], None]

LIBRARY = '''
class PortAudioError(Exception):
    """As the real one: no OSError."""

def query_hostapis():
    return ({"name": "ALSA"},)

def reported(name, inputs, rate):
    return {"name": name, "hostapi": 0, "default_samplerate": rate,
            "max_output_channels": 2, "max_input_channels": inputs}

'''
TWO = "def query_devices():\n    return [reported('USB [2ch] é', 2, 48000.0), reported('Speakers', 0, 44100.0)]\n"


@pytest.fixture
def offer(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Offer:
    """Put a sound library in place whose text is LIBRARY and what is given."""
    monkeypatch.setenv("PYTHONPATH", str(tmp_path))

    def put(text: str) -> None:
        (tmp_path / "sounddevice.py").write_text(LIBRARY + text, encoding="utf-8")

    return put


def test_interfaces_are_listed(offer: Offer, capsys: pytest.CaptureFixture[str]) -> None:
    """Name, channels and rate of each, and whether it can play and record at once."""
    offer(TWO)
    assert main(["devices"]) == 0
    lines = capsys.readouterr().out.splitlines()
    for name, rate, answer in (("USB [2ch] é", "48000", "yes"), ("Speakers", "44100", "no")):
        (line,) = [line for line in lines if name in line]
        assert rate in line and line.rstrip().endswith(answer)
    assert main(["devices", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)["devices"]
    assert [(device["number"], device["name"], device["full_duplex"]) for device in told] == [
        (0, "USB [2ch] é", True), (1, "Speakers", False)]  # fmt: skip
    assert told[0]["host"] == "ALSA"


def test_no_interface_is_said(offer: Offer, capsys: pytest.CaptureFixture[str]) -> None:
    """Without any interface stdout is empty and the other way is named."""
    offer("def query_devices():\n    return []\n")
    assert main(["devices"]) == 0
    out, err = capsys.readouterr()
    assert out == "" and "No sound interface was found" in err and "freqid import" in err


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("def query_devices():\n    raise PortAudioError('Host error')\n", "cannot be listed: Host error"),
        ("raise OSError('PortAudio library not found')\n", "PortAudio library not found; install the PortAudio"),
        ("import os\nos._exit(7)\n", "the stream process ended by itself (status 7)"),
        ("print('noise on standard output')\nraise ImportError('broken')\n", "broken; install the PortAudio library"),
    ],
)
def test_failing_sound_system_is_one_line(
    text: str, expected: str, offer: Offer, capsys: pytest.CaptureFixture[str]
) -> None:
    """A refusal, a missing library, even a library that takes its process down: one line, status 1."""
    offer(text)
    assert main(["devices"]) == 1
    err = capsys.readouterr().err
    assert expected in err and err.count("\n") == 1


def test_sound_system_that_hangs_is_left(
    offer: Offer, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """A library that never answers is given up after a while (shortened here) and its process ended."""
    monkeypatch.setattr("freqid.capture.sound.stream_link.ANSWER", 1.0)
    offer("import time\ntime.sleep(600)\n")
    assert main(["devices"]) == 1
    assert "no answer from the sound system within 1 s" in capsys.readouterr().err
