"""What does a laboratory file with its test records to show that the program was checked on its machine?

One page of plain HTML that needs nothing else: machine, versions, date, every published value beside the computed
one, the SHA-256 of every installed file, and a place to sign. ISO/IEC 17025:2017, 7.11.2, asks that software be
validated before use; this page is the record of that check for the numbers in `reference_data`, and of no more.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from html import escape
from itertools import groupby

from freqid.installation import Installation
from freqid.published_values import ValueCheck

__all__ = ["selfcheck_page"]

COLUMNS = ("row", "quantity", "inputs", "published", "computed", "deviation", "tolerance", "status", "result")
STYLE = """
body { font: 14px/1.4 sans-serif; margin: 2em auto; max-width: 75em; padding: 0 1em; color: #111; background: #fff }
table { border-collapse: collapse; margin: 0.5em 0 1.5em }
th, td { border-bottom: 1px solid #bbb; padding: 0.15em 0.7em; text-align: left; vertical-align: top }
.missed { font-weight: bold; background: #f6c9c0 }
.verdict { border: 2px solid #111; padding: 0.6em 1em; font-size: 1.2em }
.sign td { height: 2.4em; min-width: 22em }
code { font-size: 12px; overflow-wrap: anywhere }
@media print { body { max-width: none; margin: 0 } tr { break-inside: avoid } }
"""


def selfcheck_page(checks: Sequence[ValueCheck], installation: Installation) -> str:
    """The page as HTML text, one table for each file of reference data."""
    groups = groupby(checks, key=lambda check: check.entry.file)
    parts = [
        "<h1>freqid selfcheck</h1>",
        _verdict(checks),
        _pairs("Machine", [("date (UTC)", installation.inspected), *installation.machine]),
        _pairs("Versions", installation.versions),
        _signature(),
        "<h2>Published and computed values</h2>",
        "<p>Deviation is published minus computed, in the unit of the value; for a rule of thumb it is in percent of "
        "the computed value and is compared with the known error of the rule.</p>",
        *(_group(file, list(group)) for file, group in groups),
        _files(installation),
    ]
    return _document("\n".join(parts))


def _document(body: str) -> str:
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n<title>freqid selfcheck</title>\n'
        f"<style>{STYLE}</style>\n</head>\n<body>\n{body}\n</body>\n</html>\n"
    )


def _verdict(checks: Sequence[ValueCheck]) -> str:
    missed = sum(not check.passed for check in checks)
    word = "Passed" if checks and not missed else "NOT PASSED"
    return f'<p class="verdict">{word}: {len(checks)} published values recomputed, {missed} missed.</p>'


def _pairs(heading: str, pairs: Iterable[tuple[str, str]]) -> str:
    return f"<h2>{escape(heading)}</h2>\n{_table((), pairs)}"


def _signature() -> str:
    rows = [("name", ""), ("function", ""), ("date", ""), ("signature", "")]
    return "<h2>Accepted for use by</h2>\n" + _table((), rows).replace("<table>", '<table class="sign">', 1)


def _group(file: str, checks: Sequence[ValueCheck]) -> str:
    sources = sorted({check.entry.source for check in checks})
    cited = "".join(f"<li>{escape(source)}</li>" for source in sources)
    return f"<h3>{escape(file)}</h3>\n{_table(COLUMNS, map(_row, checks))}\n<p>Sources:</p>\n<ul>{cited}</ul>"


def _row(check: ValueCheck) -> tuple[str, ...]:
    entry = check.entry
    unit = "" if entry.unit == "1" else f" {entry.unit}"
    expected = "" if entry.rule_error_percent is None else f" about {entry.rule_error_percent:+g} %"
    return (
        entry.row,
        entry.quantity.replace("_", " "),
        ", ".join(f"{name} {value:g}" for name, value in entry.inputs.items()),
        f"{entry.published:.10g}{unit}",
        check.fault or f"{check.computed:.9g}{unit}",
        f"{check.deviation:+.2g}",
        f"±{entry.tolerance:g}{expected}",
        entry.status,
        "pass" if check.passed else "MISSED",
    )


def _files(installation: Installation) -> str:
    rows = [(file.name, file.sha256) for file in installation.files]
    return (
        f"<h2>Installed files</h2>\n<p>{len(rows)} files; fingerprint of all: <code>{installation.fingerprint}</code> "
        "(SHA-256 of the lines \"sha256, two spaces, name\").</p>\n" + _table(("file", "SHA-256"), rows)
    )


def _table(columns: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    head = "<tr>" + "".join(f"<th>{escape(column)}</th>" for column in columns) + "</tr>\n" if columns else ""
    return f"<table>\n{head}" + "".join(map(_table_row, rows)) + "</table>"


def _table_row(cells: Sequence[str]) -> str:
    mark = ' class="missed"' if cells[-1] == "MISSED" else ""
    return f"<tr{mark}>" + "".join(f"<td>{escape(cell)}</td>" for cell in cells) + "</tr>\n"
