"""Is the rig left at rest and the data on disk, whatever happens? One strike of the faults that matter most.

All of them, often and at random instants, are in `tests/benchmarks/capture_faults.py`.
"""

from __future__ import annotations

import os
import re

import pytest
from jack_rig import jack_rig
from plant_client import PlantSettings
from sound_faults import FAULTS, REFUSALS, Fault, Refusal, refused, struck
from sound_session import SoundSession

RATE = 8000  # Hz
PERIOD = 256  # frames
VOLTAGE_LIMIT = 5.0  # V, of the sheet
TESTED = ("server killed", "child killed", "parent killed", "Ctrl-C twice", "callback exception", "angle near stops")
IMMEDIATE = ("not armed", "rate of the server", "no PortAudio")

pytestmark = pytest.mark.usefixtures("jack_server_programs")


@pytest.fixture(scope="module")
def planned(tmp_path_factory: pytest.TempPathFactory, jack_server_programs: None) -> SoundSession:
    """A folder with a short profile."""
    session = SoundSession(folder=tmp_path_factory.mktemp("planned") / "a vane é", environment=os.environ)
    session.new(RATE)
    session.do("excite", "--duration", "10", "--band", "1", "8", "--seed", "1")
    return session


@pytest.fixture
def session(planned: SoundSession, tmp_path_factory: pytest.TempPathFactory) -> SoundSession:
    """A folder of its own with the same profile."""
    fresh = SoundSession(folder=tmp_path_factory.mktemp("struck") / "a vane é", environment=os.environ)
    fresh.copy_plan(planned)
    return fresh


@pytest.mark.parametrize("fault", [fault for fault in FAULTS if fault.name in TESTED], ids=lambda fault: fault.name)
def test_data_stay_and_the_rig_comes_to_rest(fault: Fault, session: SoundSession) -> None:
    """Ended, said why, at most a second lost, the file readable and marked incomplete, no step, no voltage too high."""
    with jack_rig(PlantSettings(sample_rate=RATE, noise=0.3, **fault.plant), period=PERIOD) as rig:
        session.environment = rig.environment
        outcome = struck(fault, session, rig, after=1.5)
    assert outcome.status is not None, "it hangs"
    assert outcome.status != 0
    assert re.search(fault.says, outcome.message), outcome.message
    assert outcome.readable
    assert not outcome.complete
    assert outcome.lost <= 1.0
    assert outcome.highest_voltage <= VOLTAGE_LIMIT
    assert outcome.gentle or not fault.ramped, outcome


@pytest.mark.parametrize("refusal", [one for one in REFUSALS if one.name in IMMEDIATE], ids=lambda one: one.name)
def test_what_cannot_be_done_is_refused_in_silence(
    refusal: Refusal, session: SoundSession
) -> None:
    """Exit status 1, one sentence without a traceback, and not a sample that is not zero."""
    plant = PlantSettings(sample_rate=round(RATE * refusal.server_rate))
    with jack_rig(plant, period=PERIOD) as rig:
        session.environment = rig.environment
        outcome = refused(refusal, session, rig)
    assert outcome.status == 1
    assert re.search(refusal.says, outcome.message), outcome.message
    assert "Traceback" not in outcome.message
    assert outcome.highest_voltage == 0
    assert not outcome.readable
