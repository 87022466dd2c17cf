"""`freqid selfcheck`: its counts, its page to sign, and that a fault in the program turns it red."""

from __future__ import annotations

import dataclasses
import hashlib
import importlib.util
import json
import math
import re
import sys
from collections.abc import Iterator
from html.parser import HTMLParser
from pathlib import Path
from types import ModuleType

import pytest

import freqid
from freqid.cli import main
from freqid.installation import Installation, InstalledFile, inspect_installation
from freqid.published_quantities import QUANTITIES
from freqid.published_values import (
    PublishedValue,
    ValueCheck,
    check_published_values,
    read_published_values,
    reference_folder,
)
from freqid.selfcheck_page import selfcheck_page

ENTRY = next(entry for entry in read_published_values() if entry.quantity == "percent_overshoot")
PASSED = ValueCheck(entry=ENTRY, computed=ENTRY.published)
MISSED = ValueCheck(entry=ENTRY, computed=ENTRY.published + 2 * ENTRY.tolerance)
INSTALLATION = Installation(
    inspected="2025-01-01T00:00:00+00:00",
    machine=(("name", "bench <1> & é"),),
    versions=(("freqid", "0"),),
    files=(InstalledFile(name="freqid/a.py", sha256="0" * 64),),
)


@pytest.fixture
def one_value(monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """The command checks a single entry, so that these tests are quick."""
    monkeypatch.setattr("freqid.cli.selfcheck.check_published_values", lambda: check_published_values([ENTRY]))
    yield


class _Tags(HTMLParser):
    """Collects every tag and attribute, and whether tables are closed."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.seen: list[tuple[str, dict[str, str | None]]] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.seen.append((tag, dict(attrs)))
        if tag != "meta":
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag


def test_the_page_is_whole_and_fetches_nothing() -> None:
    """Every tag is closed, and no tag or style reaches for another file or the network."""
    page = selfcheck_page([PASSED, MISSED], INSTALLATION)
    tags = _Tags()
    tags.feed(page)
    assert tags.open == []
    assert not any({"src", "href"} & attributes.keys() for _, attributes in tags.seen)
    assert "@import" not in page and "url(" not in page


def test_the_page_says_what_the_check_found() -> None:
    """Passed only where nothing is missed and something was checked; a missed row is marked; text is escaped."""
    passed, missed = selfcheck_page([PASSED], INSTALLATION), selfcheck_page([PASSED, MISSED], INSTALLATION)
    assert ">Passed: 1 published values recomputed, 0 missed." in passed and 'class="missed"' not in passed
    assert ">NOT PASSED: 2 published values recomputed, 1 missed." in missed
    assert missed.count('<tr class="missed">') == 1
    assert ">NOT PASSED: 0" in selfcheck_page([], INSTALLATION)
    assert "bench &lt;1&gt; &amp; é" in passed and INSTALLATION.fingerprint in passed and "signature" in passed


def test_every_installed_file_is_listed_with_its_sha256() -> None:
    """The list holds each module of both packages and each reference file once, with the sum of its bytes."""
    found = {file.name: file.sha256 for file in inspect_installation(reference_folder()).files}
    root = Path(freqid.__file__).parents[1]
    modules = [path for name in ("freqid", "excitation") for path in (root / name).rglob("*.py")]
    expected = {path.relative_to(root).as_posix() for path in modules}
    expected |= {f"reference_data/{path.name}" for path in reference_folder().glob("*.toml")}
    assert expected <= found.keys()
    assert not any("__pycache__" in name or name.startswith("freqid/reference_data") for name in found)
    assert found["freqid/quantity.py"] == hashlib.sha256((root / "freqid" / "quantity.py").read_bytes()).hexdigest()


def test_the_fingerprint_is_that_of_every_byte(tmp_path: Path) -> None:
    """One byte more in one reference file changes the fingerprint; the same bytes give the same."""
    (tmp_path / "a.toml").write_bytes(b"x = 1\n")
    first, again = inspect_installation(tmp_path), inspect_installation(tmp_path)
    (tmp_path / "a.toml").write_bytes(b"x = 1\n\n")
    assert first.fingerprint == again.fingerprint != inspect_installation(tmp_path).fingerprint


@pytest.mark.usefixtures("one_value")
def test_the_report_is_written_whole(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`--report` writes one file and nothing beside it, in a folder with a space; the table is still printed."""
    page = tmp_path / "test records é" / "self check.html"
    assert main(["selfcheck", "--report", str(page)]) == 0
    captured = capsys.readouterr()
    assert [path.name for path in page.parent.iterdir()] == ["self check.html"]
    assert ">Passed: 1 " in page.read_text(encoding="utf-8")
    assert "1 published values from 1 sources in 1 groups, 0 missed" in captured.out and "wrote" in captured.err


@pytest.mark.usefixtures("one_value")
def test_a_report_that_cannot_be_written_is_one_line(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A file where a folder is needed is a fault of status 1, in one line."""
    (tmp_path / "file").write_text("", encoding="utf-8")
    assert main(["selfcheck", "--json", "--report", str(tmp_path / "file" / "page.html")]) == 1
    assert capsys.readouterr().err.count("\n") == 1


def test_a_quantity_that_cannot_be_computed_is_missed(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """A fault in one function leaves the others checked; its values are missed, and null in JSON."""

    def fail(**_: float) -> float:
        raise ZeroDivisionError("no luck")

    other = next(entry for entry in read_published_values() if entry.quantity == "quality_factor")
    monkeypatch.setattr("freqid.published_values.QUANTITIES", {**QUANTITIES, "percent_overshoot": fail})
    monkeypatch.setattr("freqid.cli.selfcheck.check_published_values", lambda: check_published_values([ENTRY, other]))
    assert main(["selfcheck", "--json"]) == 1
    content = json.loads(capsys.readouterr().out)
    failed, sound = content["values"]
    assert (content["failed"], failed["computed"], failed["passed"], sound["passed"]) == (1, None, False, True)
    assert failed["fault"] == "ZeroDivisionError: no luck"
    assert main(["selfcheck"]) == 1
    assert re.search(r"2 published values from \d sources in \d groups, 1 missed", capsys.readouterr().out)


def test_an_infinite_input_is_null_in_json(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """The normal distribution is Student's with infinitely many degrees of freedom; JSON has no infinity."""
    endless = [e for e in read_published_values() if math.inf in e.inputs.values()]
    monkeypatch.setattr("freqid.cli.selfcheck.check_published_values", lambda: check_published_values(endless))
    assert main(["selfcheck", "--json"]) == 0
    (value,) = json.loads(capsys.readouterr().out)["values"]
    assert value["inputs"] == {"degrees_of_freedom": None} and abs(value["computed"] - 1.96) < 5e-4


@pytest.mark.parametrize("computed", [math.nan, math.inf, -math.inf, 0.0])
@pytest.mark.parametrize("rule", [None, 5.0])
def test_no_pass_for_what_is_no_number(computed: float, rule: float | None) -> None:
    """NaN, infinity and, for a value far from it, zero pass neither as a value nor as a rule of thumb."""
    entry: PublishedValue = dataclasses.replace(ENTRY, rule_error_percent=rule, published=50.0)
    assert not ValueCheck(entry=entry, computed=computed).passed


def _mutants() -> ModuleType:
    place = Path(__file__).parent / "benchmarks" / "selfcheck_mutants.py"
    spec = importlib.util.spec_from_file_location("selfcheck_mutants", place)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


@pytest.mark.parametrize(
    ("what", "only", "quantity"),
    [
        ("overshoot's exponent without pi", "step_response.toml", "percent_overshoot"),
        ("scatter of a mean over n", "metrology.toml", "uncertainty_of_mean_of_five"),
    ],
)
def test_a_fault_in_the_program_turns_the_check_red(tmp_path: Path, what: str, only: str, quantity: str) -> None:
    """A wrong exponent and a wrong number of degrees of freedom, in a copy, are each missed values and status 1."""
    mutants = _mutants()
    (mutant,) = (mutant for mutant in mutants.MUTANTS if mutant.what == what)
    outcome = mutants.run_mutant(mutant, scratch=tmp_path, only=only)
    assert outcome.seen and quantity in outcome.quantities
    assert mutants.run_mutant(None, scratch=tmp_path, only=only).status == 0


def test_every_fault_of_the_benchmark_can_still_be_planted() -> None:
    """The text each of them replaces stands in its file exactly once."""
    mutants = _mutants()
    assert len(mutants.MUTANTS) >= 10
    for mutant in mutants.MUTANTS:
        text = (mutants.CHECKOUT / mutant.file).read_text(encoding="utf-8")
        assert text.count(mutant.old) == 1, mutant.what
