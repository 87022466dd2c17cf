"""Was Ctrl-C pressed? An interruption that foreign code swallows is remembered, and raised again.

Python raises KeyboardInterrupt wherever the program happens to be. Inside a finaliser or a weak reference's callback it
is dropped (`sys.unraisablehook`), while a compiled module is being loaded it comes out as an ImportError.
"""

from __future__ import annotations

import _thread
import signal
import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from types import FrameType
from typing import Any

__all__ = ["remembered_interruption"]

AGAIN = 0.05  # s until a dropped interruption is raised again: by then the finaliser has ended


@contextmanager
def remembered_interruption() -> Iterator[Callable[[], bool]]:
    """Give a function that tells whether Ctrl-C was pressed since; one that was dropped is raised again.

    Does nothing outside the main thread, or where another handler is in place.
    """
    seen = threading.Event()
    usual = threading.current_thread() is threading.main_thread()
    if not usual or signal.getsignal(signal.SIGINT) is not signal.default_int_handler:
        yield seen.is_set
        return

    def remember(number: int, frame: FrameType | None) -> None:
        seen.set()
        signal.default_int_handler(number, frame)

    before = sys.unraisablehook

    def raise_again(dropped: Any) -> None:
        if isinstance(dropped.exc_value, KeyboardInterrupt):
            threading.Timer(AGAIN, _thread.interrupt_main).start()
        else:
            before(dropped)

    signal.signal(signal.SIGINT, remember)
    sys.unraisablehook = raise_again
    try:
        yield seen.is_set
    finally:
        sys.unraisablehook = before
        signal.signal(signal.SIGINT, signal.default_int_handler)
