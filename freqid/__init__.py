"""freqid: does the frequency-domain test of an electromechanical rig agree with its step test?

Importing the package is cheap: each public name is fetched from its module when it is first asked for.
"""

from __future__ import annotations

TYPE_CHECKING = False  # as typing has it, without importing typing
if TYPE_CHECKING:
    from typing import Any

__version__ = "0.2.0"

_WHERE = {
    "AngleStream": "freqid.records",
    "Caveat": "freqid.quantity",
    "CrossCheck": "freqid.crosscheck.comparison_result",
    "FreqidError": "freqid.errors",
    "FrequencyResponse": "freqid.estimate.frequency_response",
    "Identification": "freqid.estimate.identification",
    "IdentifiedModel": "freqid.estimate.model",
    "InputStream": "freqid.records",
    "Origin": "freqid.records",
    "Periodicity": "freqid.records",
    "Quantity": "freqid.quantity",
    "Rig": "freqid.rig",
    "Run": "freqid.records",
    "SecondOrder": "freqid.second_order",
    "SimulatedRig": "freqid.capture.simulated_rig",
    "SimulatedSensor": "freqid.capture.simulated_rig",
    "StepResult": "freqid.step_test.step_result",
    "TestFolder": "freqid.test_folder",
    "cross_check": "freqid.crosscheck.comparison",
    "evaluate_steps": "freqid.step_test.evaluation",
    "identify": "freqid.estimate.identification",
    "input_from_profile": "freqid.capture.simulated_rig",
    "read_resonance": "freqid.estimate.resonance",
    "read_rig": "freqid.rig",
    "read_run": "freqid.run_file",
    "write_run": "freqid.run_file",
}

__all__ = ["__version__", *_WHERE]


def __getattr__(name: str) -> Any:
    if name not in _WHERE:
        raise AttributeError(f"module 'freqid' has no attribute {name!r}")
    from importlib import import_module

    return getattr(import_module(_WHERE[name]), name)


def __dir__() -> list[str]:
    return sorted(__all__)
