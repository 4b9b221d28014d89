"""The worst board within tolerance, ready for the page and the terminal."""

from __future__ import annotations

import math

from netlist.report.wording import NONE, decibel, quantity, stated
from synth.circuit import Circuit
from synth.results import Design
from synth.worstcase import WorstCase, WorstError

__all__ = ["shown", "worst_line", "worst_rows", "worst_sentence"]

Row = dict[str, object]

_UNITS = {"resistor": "Ω", "capacitor": "F"}


def worst_rows(found: WorstCase, design: Design) -> list[Row]:
    """Reached, bound and limit of magnitude and phase."""
    accept = design.job.accept
    rows: list[Row] = []
    for name, error, limit in (
        ("magnitude", found.magnitude_db, accept.magnitude_db),
        ("phase", found.phase_deg, accept.phase_deg),
    ):
        rows.append(
            {
                "name": f"{name} error, {error.unit}",
                "reached": decibel(error.reached),
                "bound": _bound(error),
                "limit": stated(limit, error.unit),
                "at": quantity(error.frequency_hz, "Hz"),
            }
        )
    return rows


def worst_sentence(name: str, error: WorstError, circuit: Circuit) -> str:
    """Which parts stand where on the worst board."""
    where = [
        f"{', '.join(refs)} at the {end} end of their tolerance"
        for refs, end in ((error.low, "lower"), (error.high, "upper"))
        if refs
    ]
    where += [
        f"{ref} at {quantity(error.values[ref], _UNITS[circuit.by_ref[ref].kind], 4)}"
        for ref in error.between
    ]
    if not where:
        return f"No part has a tolerance that could move the {name}."
    sign = "+" if error.sign > 0 else "−"
    return (
        f"The {name} error of {sign}{decibel(error.reached)} {error.unit} at "
        f"{quantity(error.frequency_hz, 'Hz')} is that of the board with {'; '.join(where)}."
    )


def worst_line(found: WorstCase) -> str:
    """Both in one short line."""
    return ", ".join(_range(error) for error in (found.magnitude_db, found.phase_deg))


def shown(design: Design) -> dict[str, object]:
    """Everything the page says of the worst case; empty where it is not known."""
    found = design.worst
    if found is None:
        return {}
    errors = (("magnitude", found.magnitude_db), ("phase", found.phase_deg))
    return {
        "rows": worst_rows(found, design),
        "lines": [worst_sentence(name, error, design.circuit) for name, error in errors],
        "wide": [name for name, error in errors if not error.meets],
        "frequencies": found.frequencies,
    }


def _range(error: WorstError) -> str:
    reached = f"{decibel(error.reached)} {error.unit}"
    if error.bound is None:
        return f"{reached} or more"
    return f"{reached} (none above {_bound(error)})"


def _bound(error: WorstError) -> str:
    """The bound to the digits of an error, rounded up."""
    if error.bound is None:
        return NONE
    step = 10.0 ** (math.floor(math.log10(error.bound)) - 2) if error.bound > 0 else 1.0
    # What rounding alone lifted above a step is not lifted to the next.
    return decibel(step * math.ceil(error.bound / step - 1e-6))
