"""What does each verb do? One library call a verb: a folder in, files and a value object out, nothing printed.

A stage that takes long tells how far it is through a `Progress`, which is `silent` unless given.
"""

from __future__ import annotations

from typing import Protocol

__all__ = ["Progress", "silent"]


class Progress(Protocol):
    """What a stage calls to tell how far it is."""

    def __call__(self, doing: str, fraction: float | None = None) -> None:
        """`doing` in a few words; `fraction` from 0 to 1, None where it cannot be told."""


def silent(doing: str, fraction: float | None = None) -> None:
    """The `Progress` that tells nobody."""
