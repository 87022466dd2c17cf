"""Random rig sheets: what is exported obeys the limits to the last sample, or is refused with a figure."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

N_SHEETS = 24


@pytest.fixture(scope="module")
def safe_profiles() -> ModuleType:
    """The benchmark, of which this is the quick form."""
    place = Path(__file__).parent / "benchmarks" / "safe_profiles.py"
    spec = importlib.util.spec_from_file_location("safe_profiles", place)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module  # dataclasses look their module up
    spec.loader.exec_module(module)
    return module


def test_exported_is_safe_or_refused(safe_profiles: ModuleType, tmp_path: Path) -> None:
    """Voltage, slew rate and exact swing of every exported profile stay within their limits; no third outcome."""
    outcomes = []
    for number in range(N_SHEETS):
        folder = tmp_path / str(number)
        folder.mkdir()
        outcomes.append(safe_profiles.outcome_of_sheet(folder, np.random.default_rng([1, number])))
    assert [outcome.violations for outcome in outcomes if outcome.violations] == []
    exported = [outcome for outcome in outcomes if outcome.refusal is None]
    # The sheets must put the limits to the test: some profiles reach 0.9 of the stops, where the design ends.
    assert len(exported) >= N_SHEETS // 3
    assert max(outcome.swing_share for outcome in exported) > 0.85


def test_examination_sees_a_violation(safe_profiles: ModuleType, tmp_path: Path) -> None:
    """A voltage beyond the limits is found, in voltage, slew rate and swing."""
    from freqid.rig import read_rig

    sheet = tmp_path / "rig.toml"
    sheet.write_text(safe_profiles.SHEET.format(
        voltage=1.0, slew_rate=10.0, angle=5.0, bias=0.0, rate=100, hold="zero-order", full_scale=10.0,
        sensor_rate=60.0, gain=5.0, natural_frequency=3.0, damping_ratio=0.1, delay=0.0, gain_uncertainty=0.0,
        natural_frequency_uncertainty=0.0, damping_ratio_uncertainty=0.0,
    ), encoding="utf-8")  # fmt: skip
    found = safe_profiles._examined("step", np.full(200, 1.01), read_rig(sheet)).violations
    assert [words.split(" at ")[0] for words in found] == ["voltage", "slew rate", "swing"]
