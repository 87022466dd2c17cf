"""The real sound interface: sounddevice over PortAudio. The only door to sounddevice, opened when it is needed.

float32 samples, no fixed block size (over some sound servers a fixed one splices data without a word), high latency
(a test needs no short one). Nothing here may be called in a process that must not hang: a failed sound server can
keep every one of these calls for ever.
"""

from __future__ import annotations

from types import ModuleType
from typing import Any

from freqid.capture.sound.interface import OTHERWISE, Exchange, SoundDevice, StreamRequest
from freqid.errors import CaptureError

__all__ = ["PortAudio"]


class PortAudio:
    """Every device that PortAudio knows on this computer."""

    def __init__(self) -> None:
        """Raises CaptureError where sounddevice or PortAudio is missing."""
        self._library = _library()

    def ask(self) -> tuple[SoundDevice, ...]:
        """All devices; raises CaptureError where the sound system refuses."""
        try:
            hosts = [host["name"] for host in self._library.query_hostapis()]
            found = list(enumerate(self._library.query_devices()))
        except self._library.PortAudioError as error:
            raise CaptureError(
                f"sound interfaces cannot be listed: {error}; check the sound system, try again"
            ) from None
        return tuple(
            SoundDevice(
                number=number,
                name=str(device["name"]),
                host=hosts[device["hostapi"]],
                output_channels=int(device["max_output_channels"]),
                input_channels=int(device["max_input_channels"]),
                sample_rate=float(device["default_samplerate"]),
            )
            for number, device in found
        )

    def check(self, request: StreamRequest) -> None:
        """Pass, or refuse with the device, what it was asked for and the rate it prefers."""
        for device, channels, word, check in (
            (request.output, request.output_channels, "output", self._library.check_output_settings),
            (request.input, request.input_channels, "input", self._library.check_input_settings),
        ):
            try:
                check(device=device.number, channels=channels, dtype="float32", samplerate=request.sample_rate)
            except (self._library.PortAudioError, ValueError) as error:
                raise CaptureError(
                    f"{device.name!r} refuses {channels} {word} channel{'s' if channels != 1 else ''} of float32 at"
                    f" {request.sample_rate:g} Hz ({_reason(error)}); it prefers {device.sample_rate:g} Hz: set"
                    " [output] sample_rate and [angle_sensor] sample_rate, and design again with `freqid excite`"
                ) from None

    def run(self, request: StreamRequest, exchange: Exchange) -> Any:
        """Open the stream and start it; the caller closes it."""
        library = self._library

        def callback(incoming: Any, outgoing: Any, frames: int, time: Any, status: Any) -> None:
            if not exchange(incoming, outgoing, _flags(status)):
                raise library.CallbackStop

        try:
            stream = library.Stream(
                samplerate=request.sample_rate,
                blocksize=0,
                device=(request.input.number, request.output.number),
                channels=(request.input_channels, request.output_channels),
                dtype="float32",
                latency="high",
                callback=callback,
            )
            stream.start()
        except library.PortAudioError as error:
            raise CaptureError(
                f"{request.output.name!r} could not be started: {_reason(error)}; close other programs that use it, and"
                " check the rate and the channels with `freqid devices`"
            ) from None
        return stream


def _library() -> ModuleType:
    try:
        import sounddevice
    except (OSError, ImportError) as error:
        raise CaptureError(
            f"no sound interface can be reached: {error}; install the PortAudio library (Debian and Ubuntu: package"
            f" libportaudio2; it comes with the Windows and macOS packages), {OTHERWISE}"
        ) from None
    library: ModuleType = sounddevice
    return library


def _flags(status: Any) -> int:
    if not status:
        return 0
    names = ("input_underflow", "input_overflow", "output_underflow", "output_overflow")
    return sum(1 << bit for bit, name in enumerate(names) if getattr(status, name))


def _reason(error: Exception) -> str:
    return str(error.args[0]) if error.args else type(error).__name__
