"""Which arguments do several verbs share?"""

from __future__ import annotations

from pathlib import Path

import click

__all__ = ["folder_argument", "json_option", "run_kind_option"]

folder_argument = click.argument("folder", type=click.Path(path_type=Path))
json_option = click.option("--json", "as_json", is_flag=True, help="Print the result as JSON, for scripts.")
run_kind_option = click.option(
    "--kind",
    type=click.Choice(["response", "step"]),
    default="response",
    show_default=True,
    help="A run for the frequency response, or of the step test.",
)
