"""How does a result show itself where a notebook asks for HTML? By the report, fetched when it is asked for.

Results sit below the report in the house and do not know it; this is the one place that reaches up, and only when a
notebook calls. A result takes `_repr_html_ = shown_by("model_html")`, the name of a function of `freqid.report`.
"""

from __future__ import annotations

from collections.abc import Callable
from importlib import import_module
from typing import Any

__all__ = ["shown_by"]


def shown_by(name: str) -> Callable[[Any], str]:
    """A `_repr_html_` that lets `freqid.report.<name>` show the result."""

    def shown(result: Any) -> str:
        html: str = getattr(import_module("freqid.report"), name)(result)
        return html

    shown.__doc__ = "The result as HTML, for notebooks."
    return shown
