"""How does a test become one page? Verdict first, then what it rests on.

The page is one file that asks for nothing from anywhere: style and figures stand inside it, and it needs no script.
Layout and fixed words are in templates/report.html.jinja; numbers and sentences come from `freqid.report.page_content`.
"""

from __future__ import annotations

from collections.abc import Mapping
from importlib.resources import files

from freqid.report.figure_set import ReportFigure, draw_report
from freqid.report.figure_style import DARK, LIGHT, colour_variables, svg_text
from freqid.report.page_content import page_content
from freqid.report.report_inputs import ReportInputs

__all__ = ["write_report"]


def write_report(inputs: ReportInputs, *, figures: Mapping[str, ReportFigure] | None = None) -> str:
    """The report as the text of one self-contained HTML file (UTF-8).

    `figures` are those of `draw_report(inputs)`, where they have been drawn already; None draws them.
    """
    from jinja2 import Environment, StrictUndefined

    environment = Environment(autoescape=True, undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True)
    source = files("freqid.report").joinpath("templates", "report.html.jinja").read_text(encoding="utf-8")
    drawn = draw_report(inputs) if figures is None else figures
    page = environment.from_string(source).render(
        page_content(inputs),
        figures={name: _placed(name, figure) for name, figure in drawn.items()},
        light=colour_variables(LIGHT),
        dark=colour_variables(DARK),
    )
    return "\n".join(line.rstrip() for line in page.splitlines() if line.strip()) + "\n"


def _placed(name: str, made: ReportFigure) -> dict[str, object]:
    from markupsafe import Markup

    svg = "" if made.figure is None else svg_text(made.figure, name=name.replace("_", "-"))
    return {"svg": Markup(svg), "caption": made.caption, "alternative": made.alternative, "reason": made.reason}
