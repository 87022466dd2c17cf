"""freqid devices: what the system reports of its sound interfaces, or why it cannot."""

from __future__ import annotations

import json
import sys
from importlib.abc import MetaPathFinder
from types import ModuleType
from typing import Any

import pytest

from freqid.cli import main


def reported(name: str, *, inputs: int, rate: float) -> dict[str, Any]:
    """One interface as the library reports it."""
    channels = {"max_output_channels": 2, "max_input_channels": inputs}
    return {"name": name, "hostapi": 0, "default_samplerate": rate, **channels}


DEVICES = [reported("USB [2ch]", inputs=2, rate=48000.0), reported("Speakers", inputs=0, rate=44100.0)]


def offer(monkeypatch: pytest.MonkeyPatch, devices: list[dict[str, Any]] | Exception) -> None:
    """Put a sound library in place that reports the devices, or fails."""
    library = ModuleType("sounddevice")

    class PortAudioError(Exception):
        """As the real one: no OSError."""

    def query_devices() -> list[dict[str, Any]]:
        if isinstance(devices, Exception):
            raise PortAudioError(str(devices))
        return devices

    vars(library).update(
        PortAudioError=PortAudioError, query_devices=query_devices, query_hostapis=lambda: ({"name": "ALSA"},)
    )
    monkeypatch.setitem(sys.modules, "sounddevice", library)


def test_interfaces_are_listed(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    """Name, channels and rate of each, and whether it can play and record at once."""
    offer(monkeypatch, DEVICES)
    assert main(["devices"]) == 0
    lines = capsys.readouterr().out.splitlines()
    for name, rate, answer in (("USB [2ch]", "48000", "yes"), ("Speakers", "44100", "no")):
        (line,) = [line for line in lines if name in line]
        assert rate in line and line.rstrip().endswith(answer)
    assert main(["devices", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)["devices"]
    assert [(device["number"], device["name"], device["full_duplex"]) for device in told] == [
        (0, "USB [2ch]", True), (1, "Speakers", False)]  # fmt: skip
    assert told[0]["host"] == "ALSA"


def test_no_interface_is_said(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    """Without any interface stdout is empty and the other way is named."""
    offer(monkeypatch, [])
    assert main(["devices"]) == 0
    out, err = capsys.readouterr()
    assert out == "" and "No sound interface was found" in err and "freqid import" in err


def test_refusal_of_the_sound_system_is_one_line(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """What the sound library itself reports reaches the user as one line."""
    offer(monkeypatch, RuntimeError("Host error"))
    assert main(["devices"]) == 1
    err = capsys.readouterr().err
    assert "cannot be listed: Host error" in err and err.count("\n") == 1


def test_missing_library_is_one_line_with_the_remedy(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Where PortAudio is missing, importing fails with OSError; the message says what to install."""

    class Finder(MetaPathFinder):
        def find_spec(self, fullname: str, path: object, target: object = None) -> None:
            if fullname == "sounddevice":
                raise OSError("PortAudio library not found")

    monkeypatch.delitem(sys.modules, "sounddevice", raising=False)
    monkeypatch.setattr(sys, "meta_path", [Finder(), *sys.meta_path])
    assert main(["devices"]) == 1
    err = capsys.readouterr().err
    assert "PortAudio library not found; install the PortAudio library" in err and err.count("\n") == 1
