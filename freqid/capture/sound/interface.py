"""What must a sound interface be able to do? Be asked what there is, check what is wanted, and run.

The contract has two sides to stand behind it: `freqid.capture.sound.portaudio` (the real one) and
`freqid.capture.sound.simulated_interface` (the rig of [simulated] in software). Samples are float32 in digital full
scale, frames in rows, channels in columns.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from freqid.quantity import in_unit

__all__ = [
    "FLAG_NAMES",
    "OTHERWISE",
    "Exchange",
    "Float32s",
    "OpenStream",
    "SoundDevice",
    "SoundInterface",
    "StreamRequest",
    "flag_words",
]

Float32s = NDArray[np.float32]

OTHERWISE = "or play the exported profile with your own output and use `freqid import`"
FLAG_NAMES = ("input underflow", "input overflow", "output underflow", "output overflow")  # bit 0 to bit 3


@dataclass(frozen=True, slots=True, kw_only=True)
class SoundDevice:
    """One device as the system reports it; `full_duplex` ones can play and record at once."""

    number: int
    name: str
    host: str
    output_channels: int
    input_channels: int
    sample_rate: float = in_unit("Hz")

    @property
    def full_duplex(self) -> bool:
        """Whether it can play the voltage and record both channels (voltage and angle)."""
        return self.output_channels >= 1 and self.input_channels >= 2

    def as_json(self) -> dict[str, Any]:
        """Every fact, for scripts and for the pipe."""
        names = ("number", "name", "host", "output_channels", "input_channels", "sample_rate", "full_duplex")
        return {name: getattr(self, name) for name in names}

    @classmethod
    def from_json(cls, data: dict[str, Any]) -> SoundDevice:
        """Back from `as_json`."""
        return cls(**{name: value for name, value in data.items() if name != "full_duplex"})


@dataclass(frozen=True, slots=True, kw_only=True)
class StreamRequest:
    """The stream wanted: which devices (the same one, as a rule), how many channels of each, which rate."""

    output: SoundDevice
    input: SoundDevice
    output_channels: int
    input_channels: int
    sample_rate: float = in_unit("Hz")


class Exchange(Protocol):
    """What a running stream calls for every block."""

    def __call__(self, incoming: Float32s, outgoing: Float32s, flags: int) -> bool:
        """Take the frames that came in (n, inputs), fill those to go out (n, outputs); False when all is sent.

        `flags` has a bit of `FLAG_NAMES` set where frames were lost before this block.
        """


class OpenStream(Protocol):
    """A stream that runs until the exchange says it is done."""

    def close(self) -> None:
        """End it and give the device back; may hang where the sound system has failed."""


class SoundInterface(Protocol):
    """Ask, check, then run. Every method raises CaptureError with what failed and what to do."""

    def ask(self) -> tuple[SoundDevice, ...]:
        """All devices there are."""

    def check(self, request: StreamRequest) -> None:
        """Pass where the devices accept channels, rate and float32, or refuse with the reason."""

    def run(self, request: StreamRequest, exchange: Exchange) -> OpenStream:
        """Open the stream and start it; returns at once."""


def flag_words(flags: int) -> str:
    """The flags in words: "input overflow, output underflow"."""
    return ", ".join(name for bit, name in enumerate(FLAG_NAMES) if flags >> bit & 1)
