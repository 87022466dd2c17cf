"""Delimited text: whatever way the same numbers are written, the same numbers come back."""

from __future__ import annotations

import hashlib
from itertools import cycle, product
from pathlib import Path

import numpy as np
import pytest

from freqid.capture.logs import open_log
from freqid.errors import LogError

NAMES = ("Zeit", "Spannung, roh", "Winkel")
NUMBERS = np.column_stack([np.arange(40) * 0.016, np.sin(np.arange(40)), 1e3 * np.cos(np.arange(40) / 3)])
PREAMBLES = ("", "# Prüfstand 3\n", "Messung am Prüfstand\nKanäle: 3\n\n", "% a, b; c\n// d\n")


def _written(separator: str, decimal: str, *, quoted: bool, trailing: bool, line_end: str, preamble: str) -> str:
    """The numbers as text; quotes wherever the header or the number would otherwise be split."""

    def cell(text: str, force: bool) -> str:
        return f'"{text}"' if quoted or force else text

    header = separator.join(cell(name, separator in name or separator == " ") for name in NAMES)
    rows = [
        separator.join(cell(repr(float(x)).replace(".", decimal), separator == decimal) for x in row) for row in NUMBERS
    ]
    end = separator if trailing and separator != " " else ""
    return preamble + line_end.join(line + end for line in [header, *rows]) + line_end


@pytest.mark.parametrize("separator", [",", ";", "\t", "|", " "])
@pytest.mark.parametrize("decimal", [".", ","])
def test_same_numbers_whatever_the_writing(tmp_path: Path, separator: str, decimal: str) -> None:
    """Separator, decimal sign, encoding, quoting, trailing separators, line ends and preamble change nothing."""
    path = tmp_path / "Messung ä 1.csv"
    encodings = cycle(("utf-8", "utf-8-sig", "utf-16", "utf-16-le", "latin-1"))  # five: meets every other choice
    for quoted, trailing, line_end, preamble in product((False, True), (False, True), ("\n", "\r\n"), PREAMBLES):
        text = _written(separator, decimal, quoted=quoted, trailing=trailing, line_end=line_end, preamble=preamble)
        path.write_bytes(text.encode(next(encodings)))
        table = open_log(path)
        assert [column.name for column in table.columns] == list(NAMES), (quoted, trailing, line_end, preamble)
        # repr of a double reads back as the same double, so equality is exact
        np.testing.assert_array_equal(np.column_stack([column.numbers for column in table.columns]), NUMBERS)
        assert table.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()


def test_unit_row_empty_cells_and_text_column(tmp_path: Path) -> None:
    """Units come from the row below the header, empty cells are NaN, a column of text is kept as text."""
    path = tmp_path / "log.csv"
    rows = [f"{n};{n * 0.5:.1f};{'' if n == 3 else n * n};OK".replace(".", ",") for n in range(30)]
    path.write_text("Zeit;Spannung;Winkel;Zustand\nms;mV;°;\n" + "\n".join(rows), encoding="latin-1")
    table = open_log(path)
    assert [column.unit for column in table.columns] == ["ms", "mV", "deg", None]
    np.testing.assert_array_equal(table.columns[1].numbers, np.arange(30) * 0.5)
    assert np.flatnonzero(np.isnan(table.columns[2].numbers)).tolist() == [3]
    assert table.columns[3].text == ("OK",) * 30
    assert table.lines[0] == 3 and table.where(3) == "line 6"


@pytest.mark.parametrize(
    ("name", "unit"),
    [
        ("Angle, Ch P1 (rad) Run #14", "rad"),
        ("t/ms", "ms"),
        ("time_s", "s"),
        ("Zeit in µs", "us"),
        ("u [mV]", "mV"),
        ("AngVel (rad/s)", "rad/s"),
        ("Ch_A", None),
    ],
)
def test_unit_in_header(tmp_path: Path, name: str, unit: str | None) -> None:
    """A unit is read from brackets or behind a slash, an underscore or "in", and never from other words."""
    path = tmp_path / "log.csv"
    path.write_text(f'"{name}";b\n' + "".join(f"{n};{n / 2}\n" for n in range(25)), encoding="utf-8")
    assert open_log(path).columns[0].unit == unit


def test_header_in_a_comment_and_none_at_all(tmp_path: Path) -> None:
    """A commented header names the columns; without any header they are numbered and a note says so."""
    rows = "".join(f"{n / 10},{n}\n" for n in range(25))
    (tmp_path / "a.csv").write_text("# time_s,voltage_V\n" + rows)
    (tmp_path / "b.csv").write_text(rows)
    assert [column.name for column in open_log(tmp_path / "a.csv").columns] == ["time_s", "voltage_V"]
    bare = open_log(tmp_path / "b.csv")
    assert [column.name for column in bare.columns] == ["1", "2"] and "no header" in bare.notes[0]


def test_one_column_with_decimal_commas(tmp_path: Path) -> None:
    """One column of decimal commas stays one column, by its header or by the stated decimal sign."""
    rows = "".join(f"0,{n}\n" for n in range(10, 40))
    (tmp_path / "a.txt").write_text("Winkel\n" + rows)
    (tmp_path / "b.txt").write_text(rows)
    for table in (open_log(tmp_path / "a.txt"), open_log(tmp_path / "b.txt", decimal=",")):
        np.testing.assert_array_equal(table.columns[0].numbers, np.array([float(f"0.{n}") for n in range(10, 40)]))


def test_last_line_cut_short_is_left_out(tmp_path: Path) -> None:
    """A truncated last line is dropped with a note; the same damage in the middle is an error with its place."""
    good = [f"{n / 100},{n},{n * n}" for n in range(30)]
    path = tmp_path / "cut.csv"
    path.write_text("\n".join(["t,u,y", *good, "0.3,3"]))
    table = open_log(path)
    assert len(table.lines) == 30 and any("line 32" in note for note in table.notes)
    path.write_text("\n".join(["t,u,y", "0.0,3", *good[1:]]))
    with pytest.raises(LogError, match=r"cut\.csv: line 2 ends before column 3 of 3"):
        open_log(path)
    path.write_text("\n".join(["t,u,y", *good[:12], "0.12,3", *good[13:]]))
    with pytest.raises(LogError, match=r'cut\.csv: line 14 ends before column 3 "y"'):
        open_log(path)


def test_damaged_cell_names_line_and_column_only_where_it_is_used(tmp_path: Path) -> None:
    """A cell that is no number is an error of its column, which harms no one who does not use the column."""
    rows = [f"{n / 100},{n},{'x7y' if n == 9 else n}" for n in range(30)]
    path = tmp_path / "log.csv"
    path.write_text("t,u,y\n" + "\n".join(rows) + "\n")
    table = open_log(path)
    np.testing.assert_array_equal(table.numbers(table.columns[1]), np.arange(30.0))
    with pytest.raises(LogError, match=r'line 11, column 3 "y": "x7y" is not a number'):
        table.numbers(table.columns[2])


def test_regular_and_careful_reading_agree(tmp_path: Path) -> None:
    """The quick reading of plain rows and the careful one of the same rows with a comment give the same table."""
    lines = [",".join(map(repr, map(float, row))) for row in NUMBERS]
    (tmp_path / "a.csv").write_text("t,u,y\n" + "\n".join(lines))
    (tmp_path / "b.csv").write_text("t,u,y\n" + "\n".join([*lines[:20], "# resumed", *lines[20:]]))
    quick, careful = open_log(tmp_path / "a.csv"), open_log(tmp_path / "b.csv")
    for one, other in zip(quick.columns, careful.columns, strict=True):
        np.testing.assert_array_equal(one.numbers, other.numbers)
    assert careful.lines[20] == quick.lines[20] + 1


def test_open_data_as_written(open_data: Path) -> None:
    """Byte-order mark, quoted commas, empty cells and trailing separators of real logs are read as they stand."""
    torsion = open_log(open_data / "torsion_oscillator" / "run_b.csv")
    assert torsion.columns[1].name == "Angle, Ch P1 (rad) Run #14" and torsion.columns[1].unit == "rad"
    assert len(torsion.lines) == 44813 and torsion.columns[0].numbers[0] == 0.0
    assert np.isnan(torsion.columns[6].numbers[:2]).all() and torsion.columns[6].numbers[2] == 0.9687
    silverbox = open_log(open_data / "silverbox" / "growing_noise.csv")
    assert [column.name for column in silverbox.columns] == ["V1", "V2"] and len(silverbox.lines) == 131072
