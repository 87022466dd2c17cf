"""How results look: rounded together, undetermined where nothing is known, quiet where nobody watches."""

from __future__ import annotations

import io
import json
import math
import sys

import pytest

from freqid.cli.output import print_json, print_table, progress_bar, quantity_rows
from freqid.quantity import Quantity
from freqid.stages import silent


class Terminal(io.StringIO):
    """A stream that says it is a terminal."""

    def isatty(self) -> bool:
        return True


def test_value_and_uncertainty_are_rounded_together() -> None:
    """Both end at the second digit of the expanded uncertainty; the unit 1 is not written; None is undetermined."""
    rows = quantity_rows(
        {
            # 95 % of 0.0123 is 1.95996 * 0.0123 = 0.02411: two digits, 0.024.
            "natural_frequency": Quantity.normal(3.01234, "Hz", 0.0123),
            "damping_ratio": Quantity.normal(0.11812, "1", 0.00052),  # 95 %: 0.00102
            "delay": None,
        }
    )
    assert rows == [
        ("natural frequency", "3.012 ± 0.024", "Hz"),
        ("damping ratio", "0.1181 ± 0.0010", ""),
        ("delay", "undetermined", ""),
    ]


def test_table_keeps_brackets_and_long_cells(capsys: pytest.CaptureFixture[str]) -> None:
    """Text in brackets is no markup, and in a pipe a line of 100 characters is not broken."""
    long = "x" * 90
    print_table([("[limits] voltage", long), (":vane:", "[red]")], columns=("key", "value"))
    out = capsys.readouterr().out
    assert "[limits] voltage" in out and long in out and "[red]" in out and ":vane:" in out and "\x1b" not in out


def test_json_is_json_and_refuses_what_is_none(capsys: pytest.CaptureFixture[str]) -> None:
    """What is printed for scripts can be read back; NaN is a fault, not an output."""
    print_json({"angle": "é", "values": [1.5, None]})
    assert json.loads(capsys.readouterr().out) == {"angle": "é", "values": [1.5, None]}
    with pytest.raises(ValueError, match="values is nan"):
        print_json({"values": math.nan})
    assert capsys.readouterr().out == ""


def test_progress_is_shown_on_a_terminal_only(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """In a pipe nothing is written and the stage gets the silent one; on a terminal the words appear."""
    with progress_bar() as tell:
        tell("working", 0.5)
    assert tell is silent
    assert capsys.readouterr() == ("", "")
    screen = Terminal()
    monkeypatch.setattr(sys, "stderr", screen)
    with progress_bar() as tell:
        tell("simulating [the rig]", 0.5)
    assert "simulating [the rig]" in screen.getvalue()
