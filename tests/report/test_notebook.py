"""Results show themselves in a notebook: numbers with intervals, figures, escaped words."""

from __future__ import annotations

from dataclasses import replace
from html.parser import HTMLParser

from report_rig import cross_check, identification, step_result

from freqid.quantity import Caveat
from freqid.report.quantity_words import without_unit


def tags(text: str) -> list[str]:
    """Every tag that is opened, in order; fails where the text is no HTML at all."""
    found: list[str] = []
    parser = HTMLParser()
    parser.handle_starttag = lambda tag, attributes: found.append(tag)  # type: ignore[method-assign]
    parser.feed(text)
    return found


def test_an_estimate_shows_its_curve_and_its_numbers() -> None:
    """A figure, then every parameter with its interval, then the caveats, escaped."""
    found = identification(caveats=[Caveat("doubt", "Something <odd>.")])
    html = found._repr_html_()
    assert tags(html).count("svg") == 1 and "table" in tags(html)
    for quantity in found.model.parameters.values():
        assert without_unit(quantity) in html
    assert "Something &lt;odd&gt;." in html and found.model._repr_html_() in html


def test_a_comparison_shows_verdict_strip_and_rows() -> None:
    """The verdict in large letters, the strip, one row a quantity."""
    check = cross_check()
    html = check._repr_html_()
    assert "<b>DISAGREE</b>" in html and tags(html).count("svg") == 1
    assert tags(html).count("tr") == 1 + len(check.compared)


def test_a_step_test_shows_read_offs_and_model() -> None:
    """Two tables: what was read off, and the fitted model."""
    result = replace(step_result(), caveats=())
    assert tags(result._repr_html_()).count("table") == 2
