"""The worst board within tolerance, ready for the page and the terminal."""

from __future__ import annotations

import math

from netlist.report.wording import NONE, decibel, quantity, stated
from synth.circuit import Circuit
from synth.population import Population
from synth.results import Design
from synth.worstcase import WorstCase, WorstError

__all__ = ["covered", "shown", "worst_line", "worst_rows", "worst_sentence"]

Row = dict[str, object]

_UNITS = {"resistor": "Ω", "capacitor": "F"}

_LIMITLESS = {
    "pole": "within tolerance a pole reaches the imaginary axis",
    "zero": "within tolerance the response vanishes",
}


def worst_rows(found: WorstCase, design: Design) -> list[Row]:
    """Reached, both bounds and limit of magnitude and phase."""
    accept = design.job.accept
    rows: list[Row] = []
    for name, error, limit in (
        ("magnitude", found.magnitude_db, accept.magnitude_db),
        ("phase", found.phase_deg, accept.phase_deg),
    ):
        rows.append(
            {
                "name": f"{name} error, {error.unit}",
                "reached": "no limit" if error.unlimited else decibel(error.reached),
                "bound": _rounded_up(error.bound),
                "everywhere": _rounded_up(error.everywhere),
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
    if error.unlimited:
        return (
            f"The {name} error has no limit, which is proven: {_LIMITLESS[error.unlimited]} near "
            f"{quantity(error.frequency_hz, 'Hz')}, on a board with {'; '.join(where)}."
        )
    return (
        f"The {name} error of {sign}{decibel(error.reached)} {error.unit} at "
        f"{quantity(error.frequency_hz, 'Hz')} is that of the board with {'; '.join(where)}."
    )


def worst_line(found: WorstCase, population: Population) -> str:
    """Both in one short line, and what is not in them."""
    line = ", ".join(_range(error) for error in (found.magnitude_db, found.phase_deg))
    spread = population.gain_bandwidth_spread
    return f"{line}; op-amps at their figures" if spread else line


def covered(population: Population) -> list[str]:
    """What the worst case holds for, in sentences, beyond parts within their tolerance."""
    said = []
    if population.temperature is not None:
        said.append(
            "The range of temperatures is in it, each part at its own temperature and with the "
            "largest coefficient of either sign."
        )
    if population.networks:
        said.append(
            "Matched parts are taken as free of each other: the bounds hold for them all the more, "
            "but the board that reaches the first figure may not exist."
        )
    if population.gain_bandwidth_spread:
        said.append(
            "The spread of the op-amps is not in it, they have their figures: boards of the run "
            "may be beyond the bounds."
        )
    return said


def shown(design: Design) -> dict[str, object]:
    """Everything the page says of the worst case; empty where it is not known."""
    found = design.worst
    if found is None:
        return {}
    errors = (("magnitude", found.magnitude_db), ("phase", found.phase_deg))
    return {
        "rows": worst_rows(found, design),
        "lines": [worst_sentence(name, error, design.circuit) for name, error in errors],
        "wide": [name for name, error in errors if not error.meets and not error.unlimited],
        "frequencies": found.frequencies,
        "covered": covered(design.job.board.population),
    }


def _range(error: WorstError) -> str:
    reached = f"{decibel(error.reached)} {error.unit}"
    if error.unlimited:
        return f"{error.unit} without limit ({_LIMITLESS[error.unlimited]})"
    if error.everywhere is not None:
        return f"{reached} (none above {_rounded_up(error.everywhere)} in the whole band)"
    if error.bound is not None:
        return f"{reached} (none above {_rounded_up(error.bound)} at the judged frequencies)"
    return f"{reached} or more"


def _rounded_up(bound: float | None) -> str:
    """A bound to the digits of an error."""
    if bound is None:
        return NONE
    step = 10.0 ** (math.floor(math.log10(bound)) - 2) if bound > 0 else 1.0
    # What rounding alone lifted above a step is not lifted to the next.
    return decibel(step * math.ceil(bound / step - 1e-6))
