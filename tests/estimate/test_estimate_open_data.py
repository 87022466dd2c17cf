"""A real device: a torsion oscillator at two dampings.

Sources and terms: the README beside the data. The expectations are fits made independently in the time domain.
"""

from __future__ import annotations

from pathlib import Path

import pytest

from freqid.capture.logs.import_settings import ImportSettings, RigFacts
from freqid.capture.logs.run_from_logs import run_from_one_log
from freqid.estimate.identification import identify

SMOOTH_RIG = RigFacts(
    angle_unit="rad",
    angle_sample_rate=50.0,
    exposure=0.0,
    stamp="end",
    output_sample_rate=50.0,
    output_hold="smooth",
    output_full_scale=10.0,
    angle_full_scale=1.0,
)


@pytest.mark.parametrize(("name", "frequency", "damping"), [("run_d", 0.703, 0.339), ("run_b", 0.697, 0.125)])
def test_torsion_oscillator(name: str, frequency: float, damping: float, open_data: Path) -> None:
    """Driver angle in, disc angle out: natural frequency within 0.5 %, damping ratio within 3 %, 99.9 % of the
    variance explained. The misfit, which follows the motion for minutes in one direction, is told, and the intervals
    contain it: they hold the time-domain values.
    """
    path = open_data / "torsion_oscillator" / f"{name}.csv"
    header = path.read_text(encoding="utf-8-sig").split("\n", 1)[0]
    label = header.split("Run #", 1)[1].split('"', 1)[0]
    settings = ImportSettings(
        input_column=f"Angle, Ch P2 (rad) Run #{label}", angle_column=f"Angle, Ch P1 (rad) Run #{label}"
    )
    found = identify(run_from_one_log(path, settings=settings, rig=SMOOTH_RIG)).model
    assert found.model.natural_frequency == pytest.approx(frequency, rel=0.005)
    assert found.model.damping_ratio == pytest.approx(damping, rel=0.03)
    assert found.explained > 0.999
    assert "model_inadequate" in [caveat.code for caveat in found.caveats]
    for name, value in (("natural_frequency", frequency), ("damping_ratio", damping)):
        quantity = found.parameters[name]
        assert quantity is not None
        assert quantity.interval_95[0] < value < quantity.interval_95[1]
        assert quantity.expanded_uncertainty < 0.025 * value
    assert found.angle_unit == "rad"
