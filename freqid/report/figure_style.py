"""How is every figure drawn? The one door to matplotlib: colours, marks, sizes, and how a figure becomes SVG or PNG.

One colour and one mark per source of knowledge: frequency test teal circles, step test ochre diamonds, model an ink
line, noise grey, distortion plum, limits hatched. Marks differ as well as colours, so that figures read in grey and to
colour-blind readers. Figures are plain `Figure` objects; pyplot is never touched.
"""

from __future__ import annotations

import io
import re
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal, cast

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = [
    "DARK",
    "LIGHT",
    "MARK",
    "Palette",
    "colour_variables",
    "dress",
    "new_figure",
    "save_figure",
    "svg_text",
]

WIDTH = 4.9  # inches: at this width the text is still readable on a telephone
_FONTS = ["DejaVu Sans", "Verdana", "sans-serif"]
_DOTS_PER_INCH = 200  # of a PNG
_SALT = "freqid"  # makes the identifiers inside an SVG the same on every run


@dataclass(frozen=True, slots=True, kw_only=True)
class Palette:
    """One colour per source of knowledge, and those of the paper."""

    frequency_test: str
    step_test: str
    model: str
    noise: str
    distortion: str
    limit: str
    faint: str
    paper: str


LIGHT = Palette(
    frequency_test="#0b7a75",
    step_test="#b4690e",
    model="#1d2733",
    noise="#7b8189",
    distortion="#7a3e65",
    limit="#a0392e",
    faint="#d5d9dd",
    paper="#fffffe",
)
DARK = Palette(
    frequency_test="#4fc4bd",
    step_test="#f0a648",
    model="#e4e8ec",
    noise="#9aa1a9",
    distortion="#cf93b8",
    limit="#ec8a7e",
    faint="#3b444d",
    paper="#171c21",
)
MARK: Mapping[Literal["frequency_test", "step_test"], str] = {"frequency_test": "o", "step_test": "D"}


def new_figure(
    *, height: float, rows: int = 1, ratios: tuple[float, ...] | None = None, palette: Palette = LIGHT
) -> tuple[Figure, list[Axes]]:
    """A figure of standard width and `height` inches with `rows` axes, one below the other."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(WIDTH, height), layout="constrained", facecolor=palette.paper)
    grid = figure.subplots(rows, 1, squeeze=False, gridspec_kw={"height_ratios": ratios or (1.0,) * rows})
    axes = list(grid[:, 0])
    for one in axes:
        dress(one, palette)
    return figure, axes


def dress(axes: Axes, palette: Palette = LIGHT) -> None:
    """Give axes of any origin (a notebook's too) fonts, thin spines, and the colours of the palette."""
    axes.set_facecolor(palette.paper)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set_color(palette.noise)
        axes.spines[side].set_linewidth(0.7)
    axes.tick_params(
        which="both", colors=palette.model, labelsize=9, width=0.7, labelfontfamily="sans-serif", color=palette.noise
    )
    for label in (axes.xaxis.label, axes.yaxis.label, axes.title):
        label.set(color=palette.model, fontsize=9.5, fontfamily="sans-serif")


def svg_text(figure: Figure, *, name: str | None = None) -> str:
    """The figure as SVG, the same text on every run.

    With a `name` it is made for standing inside a page: no prologue, identifiers that begin with the name (a page holds
    several figures), and each colour of the light palette a CSS variable (`--step-test`, ...) with that colour as
    fallback.
    """
    text = _rendered(figure, "svg").decode("utf-8")
    return text if name is None else _for_page(text, name)


def save_figure(figure: Figure, path: Path) -> None:
    """Write the figure, whole or not at all; the ending of `path` chooses .svg, .pdf or .png.

    Raises
    ------
    ValueError
        Another ending.
    """
    from freqid.test_folder import replacing

    ending = path.suffix.lower()
    forms: dict[str, Literal["svg", "pdf", "png"]] = {".svg": "svg", ".pdf": "pdf", ".png": "png"}
    if ending not in forms:
        raise ValueError(f"{path.name}: figures are written as {', '.join(forms)}, not {ending or 'without ending'!r}")
    content = _rendered(figure, forms[ending])
    with replacing(path) as temporary:
        temporary.write_bytes(content)


def colour_variables(palette: Palette) -> str:
    """CSS declarations that give the figures inside a page the colours of `palette`."""
    return " ".join(f"--{_css_name(source)}: {colour};" for source, colour in asdict(palette).items())


def _rendered(figure: Figure, form: Literal["svg", "pdf", "png"]) -> bytes:
    import matplotlib
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.backends.backend_pdf import FigureCanvasPdf
    from matplotlib.backends.backend_svg import FigureCanvasSVG

    buffer = io.BytesIO()
    settings: dict[str, Any] = {
        "svg.fonttype": "none", "svg.hashsalt": _SALT, "pdf.fonttype": 42, "font.sans-serif": _FONTS,
        "path.simplify": True,
    }  # fmt: skip
    with matplotlib.rc_context(cast(Any, settings)):  # rendering reads these; they are put back at once
        if form == "svg":
            nothing: dict[str, Any] = {"Date": None, "Creator": None, "Format": None, "Type": None}
            FigureCanvasSVG(figure).print_figure(buffer, format="svg", facecolor="auto", metadata=nothing)
            return _shorter(buffer.getvalue().decode("utf-8")).encode("utf-8")
        if form == "pdf":
            undated: dict[str, Any] = {"CreationDate": None}
            FigureCanvasPdf(figure).print_figure(buffer, format="pdf", facecolor="auto", metadata=undated)
        else:
            FigureCanvasAgg(figure).print_figure(buffer, format="png", facecolor="auto", dpi=_DOTS_PER_INCH)
    return buffer.getvalue()


def _shorter(text: str) -> str:
    """The same drawing in fewer letters: hundredths of a point, marks of one look described once, no comments."""
    text = re.sub(r"<!--.*?-->", "", text, flags=re.DOTALL)
    text = re.sub(r'\s(?:d|x|y)="[^"]*"', lambda found: re.sub(r"(\d+\.\d\d)\d+", r"\1", found[0]), text)
    text = re.sub(r"\n\s*", "\n", text)
    return re.sub(r"<g( [^>]*)>\n((?:<use [^>]*/>\n)+)</g>", _with_one_style, text)


def _with_one_style(group: re.Match[str]) -> str:
    """A group of marks with their style on the group, where all have the same."""
    attributes, marks = group[1], group[2]
    styles = set(re.findall(r' style="[^"]*"', marks))
    if len(styles) != 1 or "style=" in attributes:
        return group[0]
    style = styles.pop()
    return f"<g{attributes}{style}>\n{marks.replace(style, '')}</g>"


def _for_page(text: str, name: str) -> str:
    text = text[text.index("<svg") :]
    text = re.sub(r'\s(?:xmlns(?::\w+)?|version)="[^"]*"', "", text)
    text = text.replace("xlink:href=", "href=")
    text = re.sub(r'(\sid=")', rf"\g<1>{name}-", text)
    text = re.sub(r'(href="#|url\(#)', rf"\g<1>{name}-", text)
    text = re.sub(r'<svg([^>]*?) width="[^"]*"', r"<svg\1", text, count=1)
    text = re.sub(r'<svg([^>]*?) height="[^"]*"', r"<svg\1", text, count=1)
    for source, colour in asdict(LIGHT).items():
        text = text.replace(colour, f"var(--{_css_name(source)}, {colour})")
    return text.strip()


def _css_name(source: str) -> str:
    return source.replace("_", "-")
