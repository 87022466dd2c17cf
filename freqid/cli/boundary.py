"""How does a verb become one library call, one answer and one exit status?

The only error boundary: a fault in the data, the rig sheet or the disk is one line on stderr and status 1, wrong usage
is status 2, an interruption 130. No traceback reaches a user; with FREQID_DEBUG=1 in the environment an unexpected
exception is raised again.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Sequence

import click

from freqid.cli.interruption import remembered_interruption
from freqid.cli.verb_group import freqid_command
from freqid.errors import FreqidError

__all__ = ["run_verb"]

FAULT, USAGE, INTERRUPTED = 1, 2, 130
INTERRUPTION = "interrupted; nothing half-written was left"


def run_verb(argv: Sequence[str]) -> int:
    """Run the verb that `argv` begins with; returns the exit status and never raises."""
    _survive_narrow_encodings()
    with remembered_interruption() as interrupted:
        return _run_verb(argv, interrupted)


def _run_verb(argv: Sequence[str], interrupted: Callable[[], bool]) -> int:
    try:
        status = freqid_command.main(list(argv), prog_name="freqid", standalone_mode=False)
        return status if isinstance(status, int) else 0
    except click.UsageError as error:
        return _tell(_usage_message(error), USAGE)
    except click.ClickException as error:
        return _tell(error.format_message(), FAULT)
    except (click.Abort, KeyboardInterrupt):
        return _tell(INTERRUPTION, INTERRUPTED)
    except SystemExit as error:  # the reader of our output has gone away
        return error.code if isinstance(error.code, int) else FAULT
    except Exception as error:
        if interrupted() and not _is_fault(error):  # what an interruption turned into on its way
            return _tell(INTERRUPTION, INTERRUPTED)
        if os.environ.get("FREQID_DEBUG") == "1" and not _is_fault(error):
            raise
        return _tell(_message(error), FAULT)


def _is_fault(error: Exception) -> bool:
    if isinstance(error, (FreqidError, OSError)):
        return True
    from excitation.errors import ExcitationError  # numpy comes with it: only when something failed

    return isinstance(error, ExcitationError)


def _message(error: Exception) -> str:
    if not _is_fault(error):
        cause = f"{type(error).__name__}: {error}" if str(error) else type(error).__name__
        return f"unexpected fault ({cause[:300]}); please report it with the command that led here"
    if isinstance(error, OSError) and not isinstance(error, FreqidError) and error.strerror:
        where = f"{error.filename}: " if error.filename else ""
        return f"{where}{error.strerror}; make sure the place exists, may be written and has room, then run again"
    return str(error)


def _usage_message(error: click.UsageError) -> str:
    command = error.ctx.command_path if error.ctx else "freqid"
    return f"{error.format_message().rstrip('.')}; see `{command} --help`"


def _tell(message: str, status: int) -> int:
    click.echo(f"freqid: {' '.join(message.split())}", err=True)
    return status


def _survive_narrow_encodings() -> None:
    """A character the terminal cannot show is replaced, never a reason to fail."""
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")
