"""Which device and which channels are meant, and what PortAudio is asked for, with a sound library in its place."""

from __future__ import annotations

import sys
from types import ModuleType
from typing import Any

import numpy as np
import pytest

from freqid.capture.sound.device_choice import ChannelMap, choose_device, stream_request
from freqid.capture.sound.interface import SoundDevice
from freqid.capture.sound.portaudio import PortAudio
from freqid.errors import CaptureError


def device(number: int, name: str, out: int, into: int, host: str = "ALSA") -> SoundDevice:
    """A device of 48 kHz."""
    return SoundDevice(
        number=number, name=name, host=host, output_channels=out, input_channels=into, sample_rate=48000.0
    )


DEVICES = (
    device(0, "HDMI", 8, 0),
    device(1, "USB Interface: one", 2, 2),
    device(2, "USB Interface: two", 2, 2),
    device(3, "Headset", 0, 1),
    device(4, "Desk 2", 2, 1),
)


@pytest.mark.parametrize(
    ("wanted", "number"), [("1", 1), ("usb interface: ONE", 1), ("two", 2), ("desk", 4), ("interface: t", 2), ("2", 2)]
)
def test_device_is_found_by_number_name_or_part(wanted: str, number: int) -> None:
    """A number means the number, even where a name holds that digit; capitals do not matter."""
    assert choose_device(DEVICES, wanted, needs="both").number == number


@pytest.mark.parametrize(
    ("wanted", "expected"),
    [
        ("usb", "several devices are called 'usb': it could be 1 'USB Interface: one' (ALSA); 2 'USB Interface: two'"),
        ("9", "unknown device number 9: there are 0 'HDMI'"),
        ("mixer", "unknown device 'mixer': there are 0 'HDMI'"),
        (None, "no device is named, and it could be 1 'USB"),
    ],
)
def test_what_could_be_two_or_none_is_listed(wanted: str | None, expected: str) -> None:
    """Nothing is guessed; the message names the candidates."""
    with pytest.raises(CaptureError) as caught:
        choose_device(DEVICES, wanted, needs="both")
    assert expected in str(caught.value)


def test_the_only_device_needs_no_name_and_none_is_said() -> None:
    """One that plays and records is meant where it is the only one; an empty list is told."""
    assert choose_device(DEVICES[:2], None, needs="both").number == 1
    with pytest.raises(CaptureError, match="no sound interface: the system lists none"):
        choose_device((), "USB", needs="both")


def test_outputs_and_inputs_listed_apart_are_told_apart() -> None:
    """Of two devices of one name the one that can do what is needed is taken."""
    apart = (device(0, "Box (out)", 2, 0, "MME"), device(1, "Box (in)", 0, 2, "MME"))
    assert choose_device(apart, "Box", needs="out").number == 0
    assert choose_device(apart, "Box", needs="in").number == 1


@pytest.mark.parametrize(
    ("inputs", "words", "expected"),
    [
        (2, {}, (1, 1, 2)),
        (1, {}, (1, None, 1)),
        (2, {"loopback": "none"}, (1, None, 2)),
        (1, {"loopback": "none"}, (1, None, 1)),
        (8, {"loopback": 3, "angle": 5, "drive": 4}, (4, 3, 5)),
        (2, {"angle": 1, "loopback": 2}, (1, 2, 1)),
        (2, {"loopback": 2}, (1, 2, 1)),
    ],
)
def test_usual_channels(inputs: int, words: dict[str, Any], expected: tuple[int, int | None, int]) -> None:
    """Loopback on 1 and angle on 2; the angle alone where there is one input."""
    chosen = ChannelMap.chosen(inputs, **{"drive": 1, "loopback": None, "angle": None, **words})
    assert (chosen.drive, chosen.loopback, chosen.angle) == expected


def test_channels_that_cannot_be_are_refused() -> None:
    """The same input twice, and more channels than there are."""
    with pytest.raises(CaptureError, match="input 2 is named for the loopback and for the angle"):
        ChannelMap.chosen(2, drive=1, loopback=2, angle=2)
    for chosen, expected in (
        (ChannelMap(drive=3, loopback=1, angle=2), "has 2 output channels, --drive-channel 3"),
        (ChannelMap(drive=1, loopback=1, angle=4), "has 2 input channels, --angle-channel 4"),
        (ChannelMap(drive=1, loopback=3, angle=2), "has 2 input channels, --loopback-channel 3"),
    ):
        with pytest.raises(CaptureError, match=expected):
            stream_request((DEVICES[1], DEVICES[1]), channels=chosen, sample_rate=48000.0)


class Library(ModuleType):
    """A sound library that notes what it is asked for; `refuses` makes every check and stream fail."""

    class PortAudioError(Exception):
        """As the real one."""

    class CallbackStop(Exception):
        """As the real one."""

    def __init__(self, refuses: str | None = None) -> None:
        super().__init__("sounddevice")
        self.refuses, self.asked = refuses, dict[str, Any]()

    def _check(self, **words: Any) -> None:
        if self.refuses:
            raise self.PortAudioError(self.refuses)
        self.asked |= words

    check_output_settings = check_input_settings = _check

    def Stream(self, **words: Any) -> Library:
        """Open a stream."""
        self._check(**words)
        return self

    def start(self) -> None:
        """Start it."""


class Status:
    """Flags as the library gives them: falsy when all is well."""

    def __init__(self, **flags: bool) -> None:
        names = ("input_underflow", "input_overflow", "output_underflow", "output_overflow")
        vars(self).update({name: flags.get(name, False) for name in names})

    def __bool__(self) -> bool:
        return any(vars(self).values())


REQUEST = stream_request(
    (DEVICES[2], DEVICES[2]), channels=ChannelMap(drive=1, loopback=1, angle=2), sample_rate=48000.0
)


def test_stream_is_opened_as_the_contract_says(monkeypatch: pytest.MonkeyPatch) -> None:
    """float32, no fixed block size, input device first; flags become bits, the end a CallbackStop."""
    library = Library()
    monkeypatch.setitem(sys.modules, "sounddevice", library)
    seen = []

    def exchange(incoming: Any, outgoing: Any, flags: int) -> bool:
        seen.append(flags)
        return len(seen) < 2

    interface = PortAudio()
    interface.check(REQUEST)
    interface.run(REQUEST, exchange)
    asked = library.asked
    assert (asked["dtype"], asked["blocksize"], asked["device"], asked["channels"]) == ("float32", 0, (2, 2), (2, 1))
    buffer = np.zeros((4, 2), dtype=np.float32)
    asked["callback"](buffer, buffer, 4, None, Status())
    with pytest.raises(Library.CallbackStop):
        asked["callback"](buffer, buffer, 4, None, Status(input_overflow=True, output_underflow=True))
    assert seen == [0, 0b0110]


def test_refusals_say_what_was_asked_for(monkeypatch: pytest.MonkeyPatch) -> None:
    """Device, channels, rate, and the reason the library gives."""
    monkeypatch.setitem(sys.modules, "sounddevice", Library("Invalid sample rate"))
    interface = PortAudio()
    with pytest.raises(CaptureError, match=r"'USB Interface: two' refuses 1 output channel of float32 at 48000 Hz"
                                           r" \(Invalid sample rate\); it prefers 48000 Hz"):  # fmt: skip
        interface.check(REQUEST)
    with pytest.raises(CaptureError, match="could not be started: Invalid sample rate"):
        interface.run(REQUEST, lambda *_: True)
