"""Does the real path find the rig? Command line, PortAudio, JACK server, and a vane whose true values are known.

The noise of the vane is the same in every run of these tests, so an interval that holds the true value once holds it
always; that 95 % of them do is the business of the estimators' own tests.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from jack_rig import JackRig, jack_rig
from plant_client import PlantSettings
from sound_session import SoundSession

RATE = 2000  # Hz: all is quicker than at 48 kHz, and no different
PERIOD = 64  # frames
VANE = PlantSettings(
    sample_rate=RATE, gain=12.2, natural_frequency=3.03, damping_ratio=0.115, delay_frames=42, noise=0.3
)
TRUE = {
    "gain": VANE.gain,
    "natural_frequency": VANE.natural_frequency,
    "damping_ratio": VANE.damping_ratio,
    "delay": VANE.delay,
}

pytestmark = pytest.mark.usefixtures("jack_server_programs")


@pytest.fixture(scope="module")
def rig(jack_server_programs: None) -> Iterator[JackRig]:
    """The vane on a server of its own, as fast as the machine can."""
    with jack_rig(VANE, period=PERIOD) as running:
        running.freewheel(True)
        yield running


@pytest.fixture(scope="module")
def captured(rig: JackRig, tmp_path_factory: pytest.TempPathFactory) -> SoundSession:
    """Both tests planned and captured with what a step test of a year ago told."""
    session = SoundSession(folder=tmp_path_factory.mktemp("sound") / "a vane é", environment=rig.environment)
    session.new(RATE)
    session.do("excite", "--duration", "12", "--band", "1", "8", "--seed", "1")
    session.do("excite", "--kind", "step", "--duration", "12")
    session.do("capture", "--device", "vane", "--armed")
    session.do("capture", "--device", "vane", "--armed", "--kind", "step")
    return session


def assert_true_values(document: dict[str, Any], true: dict[str, float]) -> None:
    """Every parameter's 95 % interval holds the true value."""
    for name, value in true.items():
        low, high = document["parameters"][name]["interval_95"]
        assert low <= value <= high, f"{name}: {value} is not in [{low}, {high}]"


def test_both_tests_find_the_vane_and_agree(captured: SoundSession) -> None:
    """Gain, natural frequency, damping ratio and delay of the vane; the loopback divides the round trip out."""
    assert_true_values(json.loads(captured.do("estimate", "--json")), TRUE)
    assert_true_values(json.loads(captured.do("steptest", "--json")), TRUE)
    assert json.loads(captured.do("crosscheck", "--json"))["verdict"] == "agree"


def test_without_a_loopback_the_delay_contains_the_round_trip(
    rig: JackRig, captured: SoundSession, tmp_path: Path
) -> None:
    """The voltage as sent is then the input, and its echo comes exactly one period later."""
    session = SoundSession(folder=tmp_path / "one input", environment=rig.environment)
    session.copy_plan(captured)
    session.do("capture", "--device", "vane", "--armed", "--loopback-channel", "none", "--angle-channel", "2")
    found = json.loads(session.do("estimate", "--json"))
    assert_true_values(found, {**TRUE, "delay": TRUE["delay"] + rig.round_trip})
