"""One simulator for all tests that need one."""

import pytest

from netlist.ngspice import Simulator


@pytest.fixture(scope="session")
def simulator():
    """A worker that lives as long as the session; a test that breaks it gets a fresh one."""
    with Simulator(time_limit=30.0) as running:
        yield running
