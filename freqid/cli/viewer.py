"""How does a page or a figure get before the user's eyes? In the viewer the system has for it."""

from __future__ import annotations

from pathlib import Path

from freqid.cli.output import say

__all__ = ["show_file"]


def show_file(path: Path) -> None:
    """Open the file in the system's viewer; where there is none, say which file to open."""
    import webbrowser

    if not webbrowser.open(path.resolve().as_uri()):
        say(f"note: no viewer was found on this machine; open {path} yourself")
