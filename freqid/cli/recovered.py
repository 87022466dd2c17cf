"""Was a recording cut off in this folder? What became of it is told before anything else is done."""

from __future__ import annotations

from freqid.cli.output import say
from freqid.test_folder import TestFolder

__all__ = ["tell_recovered"]


def tell_recovered(test: TestFolder) -> None:
    """Recover what recordings that were cut off left behind, and say so on stderr."""
    if not any(test.runs.glob(".*.journal")):
        return  # as a rule; then nothing has to be imported
    from freqid.capture.sound.recovery import recover_recordings

    for recovered in recover_recordings(test):
        say(recovered.message)
