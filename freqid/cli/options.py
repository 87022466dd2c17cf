"""Which arguments do several verbs share?"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import click

__all__ = ["FiniteRange", "folder_argument", "json_option", "run_kind_option"]


class FiniteRange(click.FloatRange):
    """A number within a range; "nan" and "inf" are none."""

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        """The number, or wrong usage."""
        number = super().convert(value, param, ctx)
        if not math.isfinite(number):
            self.fail(f"{value!r} is no finite number", param, ctx)
        return number


folder_argument = click.argument("folder", type=click.Path(path_type=Path))
json_option = click.option("--json", "as_json", is_flag=True, help="Print the result as JSON, for scripts.")
run_kind_option = click.option(
    "--kind",
    type=click.Choice(["response", "step"]),
    default="response",
    show_default=True,
    help="A run for the frequency response, or of the step test.",
)
