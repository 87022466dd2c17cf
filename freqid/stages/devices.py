"""Which sound interfaces does this computer have, and what can each do?"""

from __future__ import annotations

from dataclasses import dataclass

from freqid.errors import CaptureError
from freqid.quantity import in_unit

__all__ = ["SoundInterface", "list_sound_interfaces"]


@dataclass(frozen=True, slots=True, kw_only=True)
class SoundInterface:
    """One sound interface as the system reports it; `full_duplex` ones can play and record at once."""

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


def list_sound_interfaces() -> tuple[SoundInterface, ...]:
    """All sound interfaces of this computer, empty where there are none.

    Raises
    ------
    CaptureError
        The PortAudio library is missing or refuses; the message says what to do.
    """
    try:
        import sounddevice
    except (OSError, ImportError) as error:
        raise CaptureError(
            f"sound interfaces cannot be listed: {error}; install the PortAudio library (Debian and Ubuntu: package"
            " libportaudio2; it comes with the Windows and macOS packages), or work with exported profiles and `import`"
        ) from None
    try:
        hosts = [host["name"] for host in sounddevice.query_hostapis()]
        found = list(enumerate(sounddevice.query_devices()))
    except sounddevice.PortAudioError as error:
        raise CaptureError(f"sound interfaces cannot be listed: {error}; check the sound system, try again") from None
    return tuple(
        SoundInterface(
            number=number,
            name=str(device["name"]),
            host=hosts[device["hostapi"]],
            output_channels=int(device["max_output_channels"]),
            input_channels=int(device["max_input_channels"]),
            sample_rate=float(device["default_samplerate"]),
        )
        for number, device in found
    )
