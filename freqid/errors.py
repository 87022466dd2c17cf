"""Which faults can freqid report, and what does each mean to its user?

    FreqidError
    ├── RigSheetError      rig.toml is missing, unreadable, or holds a key or value it may not hold
    ├── TestFolderError    a file of the test folder is missing, damaged or cannot be written
    ├── LogError           a log cannot be read, or its columns cannot be told apart
    ├── AlignmentError     the two logs have nothing in common that a clock map could rest on
    ├── EstimationError    the record does not determine the answer (carries the partial result)
    ├── StepTestError      no step that can be evaluated
    ├── CrossCheckError    the two results cannot be compared
    └── CaptureError       the sound interface is missing, refuses, or failed while running

Every message says what, which value, which limit and what to do, in one line.
Faults of the design of an excitation are `excitation.ExcitationError`; that package stands alone.
"""

from __future__ import annotations

__all__ = [
    "AlignmentError",
    "CaptureError",
    "CrossCheckError",
    "EstimationError",
    "FreqidError",
    "LogError",
    "RigSheetError",
    "StepTestError",
    "TestFolderError",
]


class FreqidError(Exception):
    """A fault in the data, the rig sheet or the folder, told in one line."""


class RigSheetError(FreqidError, ValueError):
    """The rig sheet is missing or holds something it may not hold."""


class TestFolderError(FreqidError, OSError):
    """A file of the test folder is missing, damaged or cannot be written."""

    __test__ = False  # the name begins with "Test"; pytest must not collect it


class LogError(FreqidError, ValueError):
    """A log cannot be read, or its columns cannot be told apart."""


class AlignmentError(FreqidError, ValueError):
    """The two logs have nothing in common that a clock map could rest on."""


class EstimationError(FreqidError, ValueError):
    """The record does not determine the answer; `partial` holds what was reached, if anything."""

    def __init__(self, message: str, partial: object | None = None) -> None:
        super().__init__(message)
        self.partial = partial


class StepTestError(FreqidError, ValueError):
    """The record holds no step that can be evaluated."""


class CrossCheckError(FreqidError, ValueError):
    """The two results cannot be compared."""


class CaptureError(FreqidError, RuntimeError):
    """The sound interface is missing, refuses, or failed while running."""
