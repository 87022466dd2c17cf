"""Who wants the test to stop? Ctrl-C, a request to end, a closed terminal: each becomes a request, none an exception.

The rig comes first: a request is looked at between two blocks and answered with the ramp to the bias. Further
requests change nothing.
"""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

__all__ = ["StopRequests", "listening_for_stop_requests"]

SIGNALS = ("SIGINT", "SIGTERM", "SIGHUP", "SIGBREAK", "SIGTSTP")


class StopRequests:
    """The first request that came, in words; None while there is none."""

    def __init__(self) -> None:
        self.reason: str | None = None

    def take(self, number: int, frame: FrameType | None) -> None:
        """As the signal module calls it."""
        self.reason = self.reason or f"interrupted ({signal.Signals(number).name})"


@contextmanager
def listening_for_stop_requests() -> Iterator[StopRequests]:
    """Turn the signals of this system that mean "stop" into requests, for as long as the block runs.

    Outside the main thread, where Python takes no signals, nothing is listened to.
    """
    requests = StopRequests()
    if threading.current_thread() is not threading.main_thread():
        yield requests
        return
    numbers = [getattr(signal, name) for name in SIGNALS if hasattr(signal, name)]
    before = {number: signal.signal(number, requests.take) for number in numbers}
    try:
        yield requests
    finally:
        for number, handler in before.items():
            signal.signal(number, handler if handler is not None else signal.SIG_DFL)
