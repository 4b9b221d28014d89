"""Physical constants, the temperature at which everything is computed, and the size of a run of
boards."""

from __future__ import annotations

__all__ = ["BOLTZMANN", "LARGEST_SEED", "MOST_BOARDS", "TEMPERATURE"]

BOLTZMANN = 1.380649e-23
"""Boltzmann constant [J/K], exact by definition: SI Brochure, 9th edition,
table 1."""

TEMPERATURE = 300.15
"""27 deg C in [K], the default temperature of ngspice."""

MOST_BOARDS = 10_000_000
"""Boards of one run at most: minutes of work, and far more than any interval of a yield needs."""

LARGEST_SEED = 2**63 - 1
"""Of the random numbers: what a program reading JSON may hold in a whole number."""
