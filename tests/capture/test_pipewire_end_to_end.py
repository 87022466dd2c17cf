"""Does the real path find the rig through ALSA too, where the first blocks get lost and the round trip is anybody's?"""

from __future__ import annotations

import json
import os
import re
from pathlib import Path

import pytest
from pipewire_rig import pipewire_rig, what_pipewire_lacks
from plant_client import PlantSettings
from sound_session import SoundSession

RATE = 8000  # Hz, that of the servers too: nothing is resampled
VANE = PlantSettings(
    sample_rate=RATE, gain=12.2, natural_frequency=3.03, damping_ratio=0.115, delay_frames=168, noise=0.3
)


@pytest.fixture
def pipewire_programs() -> None:
    """Skips with the reason where there can be no PipeWire; with CI=true in the environment it is a failure."""
    missing = what_pipewire_lacks()
    if missing is not None and os.environ.get("CI") == "true":
        pytest.fail(f"{missing}; .ci/run installs it")
    if missing is not None:
        pytest.skip(missing)


def capture_until_verified(session: SoundSession) -> None:
    """In real time a busy machine may lose a block; then the run says so, is not used, and is done again."""
    for _ in range(4):
        capture = session.start("--device", "vane", "--armed")
        if capture.wait() == 0:
            return
        assert re.search("not verified|guard: loopback", capture.last_line()), capture.text()
    pytest.fail(f"four runs did not verify: {capture.text()}")


@pytest.mark.usefixtures("pipewire_programs")
def test_vane_is_found_through_alsa(tmp_path: Path) -> None:
    """Every 95 % interval holds the vane's true value; the loopback divides a round trip of a few tenths of a second
    out.
    """
    with pipewire_rig(VANE) as rig:
        session = SoundSession(folder=tmp_path / "a vane é", environment=rig.environment)
        session.new(RATE)
        session.do("excite", "--duration", "10", "--band", "1", "8", "--seed", "1")
        capture_until_verified(session)
    found = json.loads(session.do("estimate", "--json"))["parameters"]
    for name in ("gain", "natural_frequency", "damping_ratio", "delay"):
        low, high = found[name]["interval_95"]
        assert low <= getattr(VANE, name) <= high, f"{name}: {getattr(VANE, name)} is not in [{low}, {high}]"
