"""Why might the two tests differ? Mechanisms, each with the evidence at hand; nothing is guessed.

A cause is listed only where a test of its own on these data speaks for it; its strength is that evidence between 0 and
1. `probable_causes` is the table of contents: one file per family of causes.
"""

from __future__ import annotations

from freqid.crosscheck.causes.result_causes import causes_from_results
from freqid.crosscheck.comparison_result import Cause
from freqid.crosscheck.evidence import Evidence

__all__ = ["probable_causes"]


def probable_causes(evidence: Evidence) -> tuple[Cause, ...]:
    """Causes for which the data speak, strongest first."""
    return tuple(sorted(causes_from_results(evidence), key=lambda cause: -cause.strength))
