"""Which faults can the design of an excitation report?

    ExcitationError
    └── LimitExceeded      the voltage, its slew rate or the predicted swing would pass a limit of the rig

Every message says what, which value, which limit and what to do, in one line.
"""

from __future__ import annotations

__all__ = ["ExcitationError", "LimitExceeded"]


class ExcitationError(ValueError):
    """A setting, a profile or a file that no excitation can be made from."""


class LimitExceeded(ExcitationError):
    """The profile would drive the rig past one of its limits; the message holds the figures."""
