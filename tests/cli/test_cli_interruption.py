"""Ctrl-C ends a verb even where the interruption is dropped or disguised on its way."""

from __future__ import annotations

import signal
import sys
import time

import pytest

from freqid.cli import boundary
from freqid.cli.boundary import run_verb


class Dropping:
    """Its finaliser is interrupted: Python drops what is raised there."""

    def __del__(self) -> None:
        signal.raise_signal(signal.SIGINT)


def in_a_finaliser(*_: object, **__: object) -> int:
    """Work that goes on for far longer than it takes to raise a dropped interruption again."""
    one = Dropping()
    del one
    for _ in range(1000):
        time.sleep(0.01)
    return 0


def while_loading(*_: object, **__: object) -> int:
    """As a compiled module that is interrupted while it is loaded."""
    try:
        signal.raise_signal(signal.SIGINT)
    except KeyboardInterrupt:
        raise ImportError("initialization failed") from None
    return 0


@pytest.mark.parametrize("work", [in_a_finaliser, while_loading])
def test_an_interruption_ends_the_verb(
    work: object, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Status 130 and one line; signal handler and hook are as before."""
    hook, handler = sys.unraisablehook, signal.getsignal(signal.SIGINT)
    monkeypatch.setattr(boundary.freqid_command, "main", work)
    assert run_verb(["status", "vane"]) == 130
    assert capsys.readouterr().err == "freqid: interrupted; nothing half-written was left\n"
    assert sys.unraisablehook is hook
    assert signal.getsignal(signal.SIGINT) is handler
