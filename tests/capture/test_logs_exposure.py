"""Whose exposure do imported angle samples have? The sheet's sensor's, only where the log is that sensor's."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from freqid.capture.logs import ImportSettings, RigFacts, run_from_one_log
from freqid.errors import LogError

RIG = RigFacts(
    angle_unit="deg",
    angle_sample_rate=60.0,
    exposure=0.004,
    stamp="end",
    output_sample_rate=1000.0,
    output_hold="zero-order",
    output_full_scale=10.0,
    angle_full_scale=45.0,
)


def _log(folder: Path, rate: float) -> Path:
    t = np.arange(200) / rate
    rows = [f"{a:.7f},{np.sin(40 * a):.6f},{np.cos(40 * a):.6f}" for a in t]
    path = folder / "log.csv"
    path.write_text("time_s,voltage_V,angle_deg\n" + "\n".join(rows) + "\n", encoding="utf-8")
    return path


@pytest.mark.parametrize(
    ("rate", "exposure"), [(60.0, 0.004), (59.0, 0.004), (65.9, 0.004), (50.0, 0.0), (1000.0, 0.0)]
)
def test_exposure_follows_the_rate_of_the_log(tmp_path: Path, rate: float, exposure: float) -> None:
    """Within 10 % of the sensor's nominal rate its exposure counts; another log is read as instants, and a note says
    so.
    """
    run = run_from_one_log(_log(tmp_path, rate), settings=ImportSettings(), rig=RIG)
    assert run.angle.exposure == exposure
    assert any("--exposure" in note for note in run.notes) == (exposure == 0.0)


def test_exposure_as_asked(tmp_path: Path) -> None:
    """--exposure wins over the rate, and one that is none is refused with its value."""
    run = run_from_one_log(_log(tmp_path, 1000.0), settings=ImportSettings(exposure=0.0008), rig=RIG)
    assert run.angle.exposure == 0.0008
    with pytest.raises(LogError, match=r"--exposure -1 is no exposure"):
        ImportSettings(exposure=-1.0)
