"""Why might the two tests differ? Mechanisms, each with the evidence at hand; nothing is guessed.

A cause is listed only where a test of its own on these data speaks for it; its strength is that evidence between 0 and
1. `probable_causes` is the table of contents:

- `mechanism_causes`: every fault of `mechanisms` fitted to the raw records of both tests at once (`shared_fit`);
- `data_causes`: what is wrong with the data themselves;
- `result_causes`: what the results alone tell, where the raw records are not at hand or no mechanism explains them.

A fault that shows in the records is named even where the tests agree within their tolerances. Too little data is named
only where nothing else is: nothing wrong but the uncertainty.
"""

from __future__ import annotations

from freqid.crosscheck.causes.data_causes import causes_from_data, causes_of_an_open_verdict
from freqid.crosscheck.causes.mechanism_causes import causes_from_records
from freqid.crosscheck.causes.result_causes import causes_from_results
from freqid.crosscheck.comparison_result import Cause
from freqid.crosscheck.evidence import Evidence

__all__ = ["probable_causes"]


def probable_causes(evidence: Evidence) -> tuple[Cause, ...]:
    """Causes for which the data speak, strongest first."""
    from_records = causes_from_records(evidence)
    from_results = () if from_records.causes else causes_from_results(evidence)
    from_data = causes_from_data(evidence, silent_losses=from_records.silent_losses)
    found = sorted([*from_records.causes, *from_results, *from_data], key=lambda cause: -cause.strength)
    return tuple(found) if found else causes_of_an_open_verdict(evidence)
