"""How do results look on a terminal?

Tables of words and quantities on stdout, a quantity as value ± expanded uncertainty (95 %) rounded
together; everything else on stderr; a progress bar only where stderr is a terminal. Nothing here reads
markup, so "[limits]" in a message stays as it is.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from typing import IO, Any

import click
from rich import box
from rich.console import Console
from rich.table import Table

from freqid.quantity import Caveat, Quantity
from freqid.stages import Progress, silent
from freqid.test_folder import json_text

__all__ = ["print_caveats", "print_json", "print_table", "progress_bar", "quantity_rows", "say"]

_WIDTH_OF_A_PIPE = 120
UNDETERMINED = "undetermined"


def print_table(rows: Sequence[Sequence[str]], *, columns: Sequence[str] = (), title: str = "") -> None:
    """A compact table on stdout; `columns` are its headings, none where empty."""
    width = max((len(row) for row in rows), default=len(columns))
    table = Table(box=box.SIMPLE_HEAD if columns else None, show_header=bool(columns), title=title or None,
                  title_justify="left", title_style="bold", pad_edge=False, padding=(0, 1))  # fmt: skip
    for number in range(width):
        table.add_column(columns[number] if number < len(columns) else "", overflow="fold")
    for row in rows:
        table.add_row(*row)
    _console(sys.stdout).print(table)


def quantity_rows(quantities: Mapping[str, Quantity | None]) -> list[tuple[str, str, str]]:
    """Rows (name, value ± expanded uncertainty, unit); what is None is called undetermined."""
    return [(name.replace("_", " "), *_cells(quantity)) for name, quantity in quantities.items()]


def print_json(content: Mapping[str, Any]) -> None:
    """`content` as JSON on stdout."""
    click.echo(json_text(content), nl=False)


def say(message: str) -> None:
    """One line, or a short block, on stderr."""
    click.echo(message, err=True)


def print_caveats(caveats: Sequence[Caveat]) -> None:
    """Every caveat as a line on stderr."""
    for caveat in caveats:
        say(f"note: {caveat.message}")


@contextmanager
def progress_bar() -> Iterator[Progress]:
    """A bar on stderr for as long as the block runs; none where stderr is no terminal."""
    if not sys.stderr.isatty():
        yield silent
        return
    from rich.progress import BarColumn, TextColumn, TimeElapsedColumn, TimeRemainingColumn
    from rich.progress import Progress as Bar

    columns = (TextColumn("{task.description}", markup=False), BarColumn(), TimeElapsedColumn(),
               TextColumn("left"), TimeRemainingColumn())  # fmt: skip
    with Bar(*columns, console=_console(sys.stderr), transient=True) as bar:
        task = bar.add_task("", total=None)

        def tell(doing: str, fraction: float | None = None) -> None:
            bar.update(task, description=doing, total=None if fraction is None else 1.0, completed=fraction or 0.0)

        yield tell


def _cells(quantity: Quantity | None) -> tuple[str, str]:
    if quantity is None:
        return UNDETERMINED, ""
    value, expanded = quantity.rounded()
    return f"{value} ± {expanded}", "" if quantity.unit == "1" else quantity.unit


def _console(stream: IO[str]) -> Console:
    width = None if stream.isatty() else _WIDTH_OF_A_PIPE
    return Console(file=stream, width=width, markup=False, highlight=False, emoji=False)
