"""A test folder whose rig hangs on a sound interface, with a short profile: what the capture tests start from."""

from __future__ import annotations

from pathlib import Path

from freqid.rig_template import rig_sheet_text
from freqid.stages.excite import ExciteSettings, design_excitation
from freqid.test_folder import TestFolder

__all__ = ["sheet_for_sound", "vane_on_sound"]

RATE = 4000.0


def sheet_for_sound(rate: float = RATE) -> str:
    """The built-in vane's sheet, its output and its sensor those of a sound interface."""
    text = rig_sheet_text()
    for old, new in (
        ("sample_rate = 1000.0", f"sample_rate = {rate}"),
        ("sample_rate = 60.0", f"sample_rate = {rate}"),
        ('hold = "zero-order"', 'hold = "smooth"'),
        ("exposure = 0.004", "exposure = 0.0"),
    ):
        assert old in text
        text = text.replace(old, new)
    return text


def vane_on_sound(above: Path, *, duration: float = 6.0) -> TestFolder:
    """A folder with a space and an é, with the sheet and a multisine of a few seconds."""
    made = TestFolder(above / "a vane é")
    made.path.mkdir()
    made.rig.write_text(sheet_for_sound(), encoding="utf-8")
    design_excitation(made, ExciteSettings(duration=duration, band=(1.0, 8.0)))
    return made
