"""What must somebody bear in mind at the moment the rig is about to move?"""

from __future__ import annotations

from freqid.cli.output import say

__all__ = ["print_cautions"]

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
