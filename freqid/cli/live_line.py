"""How does a running test look? One line on the terminal that renews itself; nothing where stderr is no terminal."""

from __future__ import annotations

import shutil
import sys

from freqid.stages.sound_capture import Live

__all__ = ["LiveLine"]

BAR = 12  # characters
CLOSE = 0.8  # of what is allowed: from here on the angle is pointed out


class LiveLine:
    """Called with how the test stands; raises OSError where the terminal is gone."""

    def __init__(self, angle_unit: str) -> None:
        self._unit = angle_unit
        self._shown = sys.stderr.isatty()

    def __call__(self, state: Live) -> None:
        """Renew the line."""
        if self._shown:
            text = live_text(state, self._unit)
            sys.stderr.write(f"\r\x1b[K{text[: shutil.get_terminal_size().columns - 1]}")
            sys.stderr.flush()

    def clear(self) -> None:
        """Take the line away."""
        if self._shown:
            sys.stderr.write("\r\x1b[K")
            sys.stderr.flush()


def live_text(state: Live, unit: str) -> str:
    """The line: time left, voltage, angle on its way to what is allowed, clipped samples, losses."""
    share = state.largest_angle / state.angle_limit
    filled = min(BAR, round(abs(state.angle) / state.angle_limit * BAR))
    bar = "#" * filled + "." * (BAR - filled)
    near = " CLOSE" if share > CLOSE else ""
    return (
        f"{state.left:6.1f} s left  peak {state.peak_voltage:.3g} V  angle {state.angle:+.2f} {unit} [{bar}]"
        f" largest {state.largest_angle:.3g} of {state.angle_limit:.3g}{near}  clipped {state.clipped}"
        f"  over/underruns {state.flagged}"
    )
