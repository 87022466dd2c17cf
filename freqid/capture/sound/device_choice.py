"""Which device, and which of its channels, is meant?

A device is meant by its number, its whole name or a part of its name, capitals or not. What could be two is listed,
never guessed. Channels count from 1.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from freqid.capture.sound.interface import OTHERWISE, SoundDevice, StreamRequest
from freqid.errors import CaptureError

__all__ = ["ChannelMap", "choose_device", "stream_request"]

Loopback = int | Literal["none"] | None


@dataclass(frozen=True, slots=True, kw_only=True)
class ChannelMap:
    """Which channel carries what; counted from 1. `loopback` None: the voltage is not recorded."""

    drive: int
    loopback: int | None
    angle: int

    @classmethod
    def chosen(cls, input_channels: int, *, drive: int, loopback: Loopback, angle: int | None) -> ChannelMap:
        """The map for a device with so many inputs; what is None is taken as usual.

        Usual is 1 for the loopback and 2 for the angle; the angle alone on 1 where there is one input only.
        """
        if loopback == "none" or (loopback is None and input_channels == 1):
            return cls(drive=drive, loopback=None, angle=angle or min(2, max(1, input_channels)))
        measured = loopback or 1
        if angle is None:
            angle = 2 if measured == 1 else 1
        if angle == measured:
            raise CaptureError(
                f"channels: input {angle} is named for the loopback and for the angle; give two different ones"
            )
        return cls(drive=drive, loopback=measured, angle=angle)


def choose_device(devices: Sequence[SoundDevice], wanted: str | None, *, needs: Literal["both", "in", "out"]) -> (
    SoundDevice
):  # fmt: skip
    """The device meant by `wanted`; where it is None, the only one that can play and record at once.

    Raises
    ------
    CaptureError
        There is none, or more than one; the message lists the devices it could be.
    """
    if not devices:
        raise CaptureError(f"no sound interface: the system lists none; connect one, see `freqid devices`, {OTHERWISE}")
    able = [device for device in devices if _is_able(device, needs)]
    if wanted is None:
        return _only(able, "no device is named, and", "give --device")
    if wanted.strip().isdigit():
        found = [device for device in devices if device.number == int(wanted)]
        if not found:
            raise CaptureError(f"unknown device number {wanted}: there are {_listed(devices)}")
        return found[0]
    text = wanted.strip().casefold()
    exact = [device for device in devices if device.name.casefold() == text]
    part = exact or [device for device in devices if text in device.name.casefold()]
    if not part:
        raise CaptureError(f"unknown device {wanted!r}: there are {_listed(devices)}")
    fitting = [device for device in part if _is_able(device, needs)] or part
    return _only(fitting, f"several devices are called {wanted!r}:", "give the number")


def stream_request(
    devices: tuple[SoundDevice, SoundDevice], *, channels: ChannelMap, sample_rate: float
) -> StreamRequest:
    """The stream over the output and the input device that reaches all channels of the map.

    Raises
    ------
    CaptureError
        A device has fewer channels than the map names.
    """
    output, input = devices
    inputs = max(channels.angle, channels.loopback or 0)
    for device, has, needed, word, option in (
        (output, output.output_channels, channels.drive, "output", "--drive-channel"),
        (input, input.input_channels, channels.angle, "input", "--angle-channel"),
        (input, input.input_channels, channels.loopback or 1, "input", "--loopback-channel"),
    ):
        if needed > has:
            raise CaptureError(
                f"channels: {device.name!r} has {has} {word} channel{'s' if has != 1 else ''}, {option} {needed} is"
                " wanted; choose another channel or device"
            )
    return StreamRequest(
        output=output, input=input, output_channels=channels.drive, input_channels=inputs, sample_rate=sample_rate
    )


def _is_able(device: SoundDevice, needs: Literal["both", "in", "out"]) -> bool:
    plays, records = device.output_channels >= 1, device.input_channels >= 1
    return {"both": plays and records, "in": records, "out": plays}[needs]


def _only(found: Sequence[SoundDevice], what: str, remedy: str) -> SoundDevice:
    if len(found) == 1:
        return found[0]
    if not found:
        raise CaptureError(f"{what} none plays and records; see `freqid devices`, and {remedy}")
    raise CaptureError(f"{what} it could be {_listed(found)}; {remedy}")


def _listed(devices: Sequence[SoundDevice]) -> str:
    return "; ".join(f"{device.number} {device.name!r} ({device.host})" for device in devices)
