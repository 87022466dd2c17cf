"""What do people look at? The figures, the agreement strip in text, and the report page.

Each name is fetched from its module when it is first asked for, so that a command that draws nothing loads no
matplotlib.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

_WHERE = {
    "ReportFigure": "freqid.report.figure_set",
    "ReportInputs": "freqid.report.report_inputs",
    "agreement_figure": "freqid.report.agreement_strip",
    "agreement_text": "freqid.report.agreement_words",
    "amplitude_figure": "freqid.report.amplitude_ladder",
    "cause_figure": "freqid.report.cause_card",
    "draw_agreement": "freqid.report.agreement_strip",
    "draw_amplitude": "freqid.report.amplitude_ladder",
    "draw_exhibit": "freqid.report.cause_card",
    "draw_gain": "freqid.report.gain_and_phase",
    "draw_peaks": "freqid.report.peak_box",
    "draw_phase": "freqid.report.gain_and_phase",
    "draw_report": "freqid.report.figure_set",
    "draw_residuals": "freqid.report.residual_ladder",
    "draw_step": "freqid.report.step_figure",
    "gain_and_phase_figure": "freqid.report.gain_and_phase",
    "profile_card_figure": "freqid.report.profile_card",
    "cross_check_html": "freqid.report.notebook",
    "identification_html": "freqid.report.notebook",
    "model_html": "freqid.report.notebook",
    "residual_figure": "freqid.report.residual_ladder",
    "ribbon_figure": "freqid.report.data_ribbon",
    "save_figure": "freqid.report.figure_style",
    "step_html": "freqid.report.notebook",
    "step_figure_of": "freqid.report.step_figure",
    "svg_text": "freqid.report.figure_style",
    "write_report": "freqid.report.page",
}

__all__ = list(_WHERE)


def __getattr__(name: str) -> Any:
    if name not in _WHERE:
        raise AttributeError(f"module 'freqid.report' has no attribute {name!r}")
    return getattr(import_module(_WHERE[name]), name)


def __dir__() -> list[str]:
    return sorted(__all__)
