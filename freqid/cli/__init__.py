"""What does the program `freqid` do with its words? Help and version at once, everything else through `boundary`.

The parser and its imports wait until a verb is called, so that `freqid --help` answers without delay.
"""

from __future__ import annotations

import os
import sys

TYPE_CHECKING = False  # as typing has it, without importing typing
if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = ["main"]

_USAGE = 2
_COMPLETE = "_FREQID_COMPLETE"
_SHELLS = ("bash", "zsh", "fish")


def main(argv: Sequence[str] | None = None) -> int:
    """Run one verb; `argv` is that of the process unless given.

    Returns
    -------
    int
        Exit status: 0 done, 1 a fault told in one line, 2 wrong usage, 130 interrupted; `crosscheck` adds
        3 (disagree) and 4 (unresolved).
    """
    words = list(sys.argv[1:] if argv is None else argv)
    if _COMPLETE in os.environ:  # the shell asks, through the script that --completion prints
        words = words or ["--help"]
    elif not words or words in (["--help"], ["-h"]):
        from freqid.cli.verbs import help_text

        (sys.stdout if words else sys.stderr).write(help_text())
        return 0 if words else _USAGE
    elif words == ["--version"]:
        from freqid import __version__

        sys.stdout.write(f"freqid {__version__}\n")
        return 0
    elif words[0] == "--completion":
        return _completion(words[1:])
    from freqid.cli.boundary import run_verb

    return run_verb(words)


def _completion(words: list[str]) -> int:
    """Print the script that makes a shell complete freqid's words."""
    if len(words) != 1 or words[0] not in _SHELLS:
        sys.stderr.write(f"freqid: --completion takes one of {', '.join(_SHELLS)}; see `freqid --help`\n")
        return _USAGE
    from click.shell_completion import get_completion_class

    from freqid.cli.verb_group import freqid_command

    shell = get_completion_class(words[0])
    assert shell is not None
    sys.stdout.write(shell(freqid_command, {}, "freqid", _COMPLETE).source() + "\n")
    return 0
