"""Physical constants and the temperature at which everything is computed."""

from __future__ import annotations

__all__ = ["BOLTZMANN", "TEMPERATURE"]

BOLTZMANN = 1.380649e-23
"""Boltzmann constant [J/K], exact by definition: SI Brochure, 9th edition,
table 1."""

TEMPERATURE = 300.15
"""27 deg C in [K], the default temperature of ngspice."""
