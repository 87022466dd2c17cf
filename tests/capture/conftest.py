"""A rig behind a sound interface for the tests that need one; where no server can run they skip, in CI they fail."""

from __future__ import annotations

import os

import pytest
from jack_rig import what_is_missing


@pytest.fixture(scope="session")
def jack_server_programs() -> None:
    """Skips with the reason where there can be no JACK server; with CI=true in the environment it is a failure."""
    missing = what_is_missing()
    if missing is not None and os.environ.get("CI") == "true":
        pytest.fail(f"{missing}; .ci/run installs it")
    if missing is not None:
        pytest.skip(missing)
