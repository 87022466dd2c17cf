"""What must somebody bear in mind at the moment the rig is about to move, and have they said so?"""

from __future__ import annotations

import sys
from typing import Any

import click

from freqid.cli.output import say
from freqid.errors import CaptureError

__all__ = ["ask_for_consent", "print_cautions"]

_CAUTIONS = """\
Before the rig moves:
  - The limits of its maker come first; the predicted swing is a prediction, no safety certificate.
  - Check the sign and the scale of voltage and angle at a small amplitude first.
  - Keep everybody and everything clear of the sweep, at resonance too.
  - Have a hard-wired stop within reach that does not depend on this computer.
  - A competent person decides whether the test may run, and stays with it."""


def print_cautions() -> None:
    """The cautions, as a short block on stderr."""
    say(_CAUTIONS)


def ask_for_consent(ready: dict[str, Any], *, armed: bool, action: str) -> None:
    """Show the cautions and what is about to happen; pass with `armed`, or with a typed "yes" on a terminal.

    Raises
    ------
    CaptureError
        Neither was given: nothing has been sent to the device.
    """
    print_cautions()
    say(f"{action} on {_where(ready)}")
    if ready["channels"]["loopback"] is None:
        say(
            "note: no loopback: the voltage that is really there is not recorded, so the interface's own response and"
            " its round trip stay in the result, and frames lost silently will not show"
        )
    if armed:
        return
    if not sys.stdin.isatty():
        raise CaptureError("not armed: nothing was sent; acknowledge the cautions above with --armed")
    if click.prompt("Type yes to start", default="no", err=True, show_default=False).strip().lower() != "yes":
        raise CaptureError("not armed: nothing was sent; type yes, or give --armed, when the rig may move")


def _where(ready: dict[str, Any]) -> str:
    output, input, channels = ready["output"], ready["input"], ready["channels"]
    loopback = f"loopback on input {channels['loopback']}" if channels["loopback"] else "no loopback"
    separate = "" if output["number"] == input["number"] else f", recording on {input['name']!r}"
    return (
        f"{output['name']!r} ({output['host']}){separate}: drive on output {channels['drive']}, {loopback}, angle on"
        f" input {channels['angle']}"
    )
