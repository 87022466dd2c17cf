"""The page holds what it is given, asks for nothing from anywhere, and does without what is missing."""

from __future__ import annotations

import re
from dataclasses import replace
from html import unescape
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from report_rig import cross_check, full_inputs, identification, rig_called, row, step_run

import freqid.report
from freqid.quantity import Quantity
from freqid.report import ReportInputs, draw_report, save_figure, svg_text, write_report
from freqid.report.figure_style import DARK, LIGHT, MARK, Palette
from freqid.report.quantity_words import interval, label_of, minus, number, with_uncertainty, without_unit

VOID = {"meta", "link", "br", "img", "hr", "input"}


class Outline(HTMLParser):
    """Checks that elements close in order, and gathers identifiers, references and text."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.identifiers: list[str] = []
        self.references: list[str] = []
        self.images: list[dict[str, str | None]] = []
        self.words: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        values = dict(attrs)
        if tag not in VOID:
            self.open.append(tag)
        if values.get("id"):
            self.identifiers.append(str(values["id"]))
        self.references += [str(values[name]) for name in ("src", "href", "action", "data") if values.get(name)]
        if values.get("role") == "img":
            self.images.append(values)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.handle_starttag(tag, attrs)
        if tag not in VOID:
            self.open.pop()

    def handle_endtag(self, tag: str) -> None:
        assert self.open and self.open.pop() == tag, f"</{tag}> closes something else"

    def handle_data(self, data: str) -> None:
        if self.open[-1:] != ["style"]:
            self.words.append(data)


def outline(page: str) -> Outline:
    """The page, parsed to its end."""
    parser = Outline()
    parser.feed(page)
    parser.close()
    assert parser.open == []
    return parser


@pytest.fixture(scope="module")
def inputs() -> ReportInputs:
    """A report with every part."""
    return full_inputs()


@pytest.fixture(scope="module")
def page(inputs: ReportInputs) -> str:
    """Its page."""
    return write_report(inputs)


def test_page_holds_every_number_it_is_given(inputs: ReportInputs, page: str) -> None:
    """Parameters, derived quantities, readings and differences stand there with their rounded 95 % intervals."""
    assert inputs.identification and inputs.step_result and inputs.crosscheck
    given: list[Quantity | None] = []
    model, step = inputs.identification.model, inputs.step_result
    for group in (model.parameters, model.derived, step.parameters, step.derived, step.quantities):
        given += group.values()
    for compared in inputs.crosscheck.compared:
        given += [compared.frequency_test, compared.step_test, compared.difference]
    text = unescape(page)
    assert len([quantity for quantity in given if quantity is not None]) > 40
    for quantity in given:
        assert without_unit(quantity) in text
        assert quantity is None or quantity.unit == "1" or quantity.unit in text
    for quantity in (*model.parameters.values(), *model.derived.values()):
        assert interval(quantity) in text
    for reading in step.steps:
        assert f"{reading.time:.3f} s" in text


def test_page_says_verdict_reason_causes_and_next_command(inputs: ReportInputs, page: str) -> None:
    """What the comparison concluded is there in words, the verdict before anything else."""
    text = unescape(page)
    check = inputs.crosscheck
    assert check and check.next_test
    for words in (check.sentence, check.causes[0].evidence, check.next_test.command, check.next_test.reason):
        assert words in text
    assert text.index("The two tests disagree") < text.index("<figure")


def test_page_judges_the_acceptance_limits(page: str) -> None:
    """Each limit stands with both tests' values, the verdict and what is lacking; none, no section."""
    section = page.split('<section id="requirements">')[1].split("</section>")[0]
    for words in ("percent overshoot", "at most 20", "68.40 ± 0.39", "<b>not met</b>", "by &lt;one&gt;"):
        assert words in section
    without = replace(full_inputs(), crosscheck=replace(cross_check(), requirements=()))
    assert 'id="requirements"' not in write_report(without)


def test_page_tells_what_was_done_to_the_data(page: str) -> None:
    """Notes, caveats, left-out frames, lost frames, hashes, versions, settings and rig sheet are all told."""
    text = unescape(page)
    for words in (
        "the column <angle> & its unit were taken from the header", "Something <odd> & doubtful.",
        "1 frames without a readable angle", "3 of 480 frames were lost", "ab" * 32, "ef" * 32, "slew_rate",
        "free start", "not a safety certificate", "simulated",
    ):  # fmt: skip
        assert words in text


def test_page_asks_for_nothing_from_anywhere(page: str) -> None:
    """No script, no address, no reference but to places within the page itself."""
    assert "://" not in page and "<script" not in page and "@import" not in page
    parsed = outline(page)
    assert parsed.references and all(reference.startswith("#") for reference in parsed.references)
    assert {reference[1:] for reference in parsed.references} <= set(parsed.identifiers)
    used = set(re.findall(r"url\(#([^)]+)\)", page))
    assert used and used <= set(parsed.identifiers)


def test_identifiers_are_unique_within_the_page(page: str) -> None:
    """Five figures stand in one page; their identifiers do not meet."""
    identifiers = outline(page).identifiers
    assert len(identifiers) == len(set(identifiers))


def test_names_are_escaped(page: str) -> None:
    """Names that look like markup stay text."""
    assert "<A>" not in page and "<angle>" not in page and "<odd>" not in page and "response <1>" not in page
    assert 'vane <A> & "B"' in "".join(outline(page).words)


def test_every_figure_has_words_for_those_who_do_not_see_it(page: str) -> None:
    """Five figures and the card of a cause, each with an alternative and a caption."""
    assert all(image["aria-label"] for image in outline(page).images)
    assert len(outline(page).images) == page.count("<figcaption>") == 6


def test_page_has_no_nan(page: str) -> None:
    """No NaN and no infinity reaches a reader."""
    words = " ".join(outline(page).words)
    assert "undetermined" in words
    assert not re.search(r"\b(?:nan|inf|None)\b", words)


def test_same_inputs_give_the_same_page(inputs: ReportInputs, page: str) -> None:
    """Nothing in the page depends on chance or on the hour."""
    assert write_report(inputs, figures=draw_report(inputs)) == page


@pytest.mark.parametrize(
    ("changes", "command"),
    [
        ({"step_result": None, "step_run": None, "crosscheck": None}, 'freqid steptest "my vane"'),
        ({"crosscheck": None}, 'freqid crosscheck "my vane"'),
        ({"identification": None, "response_run": None, "crosscheck": None}, 'freqid estimate "my vane"'),
        ({"step_run": None}, 'freqid capture "my vane" --kind step'),
        ({"response_run": None}, 'freqid capture "my vane"'),
    ],
)
def test_missing_parts_are_named_with_the_command_that_makes_them(
    inputs: ReportInputs, changes: dict[str, None], command: str
) -> None:
    """What is not there is one sentence, and the page is still whole."""
    page = write_report(replace(inputs, **changes), figures={})
    assert f"<code>{command}</code>" in page.replace("&#34;", '"')
    outline(page)


def test_page_without_a_step_test_keeps_the_other_figures(inputs: ReportInputs) -> None:
    """The frequency test alone gives gain and phase, residuals and ribbon."""
    page = write_report(replace(inputs, step_result=None, step_run=None, crosscheck=None))
    assert re.findall(r'id="figure-(\w+)"', page) == ["gain_and_phase", "residual_ladder", "data_ribbon"]
    outline(page)


def test_page_of_an_empty_folder_is_whole() -> None:
    """With the rig sheet alone there is a page that says what to do."""
    page = write_report(ReportInputs(rig=rig_called("vane")))
    assert "No verdict yet" in page and "<svg" not in page
    outline(page)


def test_figure_that_cannot_be_drawn_is_replaced_by_its_reason(inputs: ReportInputs) -> None:
    """A step run with too few frames to draw leaves one sentence, not a failure."""
    run = step_run()
    short = replace(run, angle=replace(run.angle, time=run.angle.time[:5], angle=run.angle.angle[:5]))
    made = draw_report(replace(inputs, step_run=short))["step"]
    assert made.figure is None and "readable angle samples" in made.reason
    assert "readable angle samples" in write_report(replace(inputs, step_run=short))


def test_verdicts_have_their_own_words() -> None:
    """Each of the three verdicts is said in its own way."""
    pages = {
        verdict: write_report(
            ReportInputs(
                rig=rig_called("vane"),
                crosscheck=replace(cross_check(row("gain", away=0.0, width=0.1, verdict=verdict)), verdict=verdict),
            )
        )
        for verdict in ("agree", "disagree", "unresolved")
    }
    assert "<strong>The two tests agree</strong>" in pages["agree"]
    assert "<strong>The two tests disagree</strong>" in pages["disagree"]
    assert "<strong>Unresolved</strong>" in pages["unresolved"]


def test_public_names_can_all_be_fetched() -> None:
    """`__all__` is what the package has, and an unknown name is an AttributeError."""
    assert all(getattr(freqid.report, name) is not None for name in freqid.report.__all__)
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        _ = freqid.report.nothing


def test_figures_are_written_whole_or_not_at_all(inputs: ReportInputs, tmp_path: Path) -> None:
    """SVG, PNG and PDF by ending, into a folder with spaces and umlauts; another ending is refused, leaving nothing."""
    figure = draw_report(inputs)["agreement_strip"].figure
    assert figure is not None
    folder = tmp_path / "Prüfung eins"
    folder.mkdir()
    save_figure(figure, folder / "strip.svg")
    save_figure(figure, folder / "strip.png")
    assert (folder / "strip.svg").read_text(encoding="utf-8") == svg_text(figure)
    assert (folder / "strip.png").read_bytes().startswith(b"\x89PNG")
    save_figure(figure, folder / "strip.pdf")
    assert (folder / "strip.pdf").read_bytes().startswith(b"%PDF")
    with pytest.raises(ValueError, match=r"\.svg, \.pdf, \.png"):
        save_figure(figure, folder / "strip.bmp")
    assert sorted(path.name for path in folder.iterdir()) == ["strip.pdf", "strip.png", "strip.svg"]


@pytest.mark.parametrize("palette", [LIGHT, DARK])
def test_colours_stand_clear_of_the_paper(palette: Palette) -> None:
    """Every source has a contrast of 3 : 1 or more against the paper (WCAG 2.1, 1.4.11)."""

    def luminance(colour: str) -> float:
        parts = [int(colour[n : n + 2], 16) / 255 for n in (1, 3, 5)]
        linear = [part / 12.92 if part <= 0.03928 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    paper = luminance(palette.paper)
    for name in ("frequency_test", "step_test", "model", "noise", "distortion", "limit"):
        pair = sorted((paper, luminance(getattr(palette, name))))
        assert (pair[1] + 0.05) / (pair[0] + 0.05) >= 3.0, name


@pytest.mark.parametrize("palette", [LIGHT, DARK])
def test_both_tests_are_told_apart_without_full_colour_vision(palette: Palette) -> None:
    """Marks differ in shape, and colours by 20 or more (CIE 1976) as seen with protanopia and deuteranopia.

    Matrices for severity 1: Machado, Oliveira, Fernandes 2009, doi:10.1109/TVCG.2009.113, table 1. A difference of
    2.3 is just noticeable; 20 is ten times that, rounded down.
    """
    seen = {
        "protanopia": [
            [0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998],
        ],
        "deuteranopia": [
            [0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.01182, 0.04294, 0.968881],
        ],
    }  # fmt: skip
    to_xyz = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])

    def lab(colour: str, matrix: list[list[float]]) -> np.ndarray:
        parts = np.array([int(colour[n : n + 2], 16) / 255 for n in (1, 3, 5)])
        linear = np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
        xyz = to_xyz @ np.clip(np.array(matrix) @ linear, 0, 1) / to_xyz.sum(axis=1)
        f = np.where(xyz > (6 / 29) ** 3, np.cbrt(xyz), xyz / (3 * (6 / 29) ** 2) + 4 / 29)
        return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])

    assert MARK["frequency_test"] != MARK["step_test"]
    for name, matrix in seen.items():
        difference = lab(palette.frequency_test, matrix) - lab(palette.step_test, matrix)
        assert np.linalg.norm(difference) >= 20, name


def test_numbers_are_rounded_by_the_one_rule() -> None:
    """Two digits of the expanded uncertainty, a true minus sign, no minus before zero."""
    assert with_uncertainty(Quantity.normal(-12.3456, "deg/V", 0.05)) == "−12.346 ± 0.098 deg/V"
    assert without_unit(None) == "undetermined"
    assert minus("-0.00") == "0.00"
    assert (number(0.012345), number(3515.2), number(float("nan"))) == ("0.0123", "3515", "undetermined")
    assert label_of("settling_time_5") == "settling time to 5 %"
    assert label_of("natural_frequency") == "natural frequency"


def test_identification_alone_makes_its_three_figures() -> None:
    """Without raw run and step test there are gain and phase and the residuals."""
    made = draw_report(ReportInputs(rig=rig_called("vane"), identification=identification()))
    assert list(made) == ["gain_and_phase", "residual_ladder"]
