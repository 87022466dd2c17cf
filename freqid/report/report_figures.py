"""The former place of `freqid.report.figure_set`."""

from __future__ import annotations

from freqid.report.figure_set import ReportFigure
from freqid.report.figure_set import draw_report as report_figures

__all__ = ["ReportFigure", "report_figures"]
