"""What all tests share: the same random examples on every run, and where the project lies."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import settings

# Examples follow from the test alone, so a run today fails where one of yesterday did; no
# example is timed, since the machine may be busy; the line that replays one stays unprinted,
# since every run replays it.
settings.register_profile("steady", derandomize=True, deadline=None, print_blob=False)
settings.load_profile("steady")


@pytest.fixture(scope="session")
def project() -> Path:
    """The project's folder."""
    return Path(__file__).resolve().parent.parent
