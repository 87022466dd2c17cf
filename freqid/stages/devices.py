"""Which sound interfaces does this computer have, and what can each do?"""

from __future__ import annotations

from freqid.capture.sound.interface import SoundDevice
from freqid.capture.sound.stream_link import list_devices

__all__ = ["SoundDevice", "list_sound_interfaces"]


def list_sound_interfaces() -> tuple[SoundDevice, ...]:
    """All sound interfaces of this computer, empty where there are none.

    Raises
    ------
    CaptureError
        The PortAudio library is missing or refuses, or the sound system does not answer; the message says what to do.
    """
    return list_devices()
