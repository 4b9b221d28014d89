"""The two tables of a pack: ``response.csv`` and ``parts.csv``, both in plain CSV (RFC 4180 but
for the line ends, which are single newlines).

Numbers are in SI units, dB and degrees.  A cell without a value is empty.  Phases run on without
jumps from a start above -190 and up to 170 deg; the error columns are board less target, the
phase error within +-180 deg, and simulated = target + error holds line by line.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from netlist.partslist import PartLine
from netlist.plots.bode import unwrapped_deg
from synth.results import Design

if TYPE_CHECKING:
    from netlist.verification import Verification

__all__ = ["PARTS_HEADER", "RESPONSE_HEADER", "parts_table", "response_table"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

RESPONSE_HEADER = (
    "frequency_hz",
    "target_db",
    "target_deg",
    "simulated_db",
    "simulated_deg",
    "error_db",
    "error_deg",
)
PARTS_HEADER = ("refs", "quantity", "kind", "value", "marking", "series", "tolerance", "note")


def response_table(design: Design, verification: Verification) -> str:
    """Target and simulated response; the simulated columns are empty without a simulation."""
    error = verification.error if verification.failure is None else None
    frequency = np.asarray(design.frequency_hz if error is None else verification.frequency_hz)
    target = design.wanted.response(frequency)
    target_db, target_deg = _decibel(target), unwrapped_deg(target)
    columns = [frequency, target_db, target_deg]
    if error is not None and verification.simulated is not None:
        simulated_db = _decibel(verification.simulated)
        columns += [simulated_db, target_deg + error.phase_deg, error.magnitude_db, error.phase_deg]
    rows = np.stack([np.asarray(c, dtype=float) for c in columns], axis=-1).tolist()
    padding = [""] * (len(RESPONSE_HEADER) - len(columns))
    return _csv(RESPONSE_HEADER, ([*map(_number, row), *padding] for row in rows))


def _decibel(response: Complex) -> Real:
    with np.errstate(divide="ignore"):
        return np.asarray(20 * np.log10(np.abs(response)))


def parts_table(lines: Iterable[PartLine]) -> str:
    """The parts list as a table, references separated by spaces."""
    return _csv(
        PARTS_HEADER,
        (
            [
                " ".join(line.refs),
                str(line.quantity),
                line.kind,
                "" if line.value is None else repr(float(line.value)),
                line.marking,
                line.series,
                "" if line.tolerance is None else repr(float(line.tolerance)),
                line.note,
            ]
            for line in lines
        ),
    )


def _csv(header: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(header)
    writer.writerows(rows)
    return stream.getvalue()


def _number(value: float) -> str:
    """Twelve significant digits; empty for what is not finite, such as the dB of a true zero."""
    return f"{value:.12g}" if math.isfinite(value) else ""
