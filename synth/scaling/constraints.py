"""What no scaling may break: ceilings of levels, ranges of R and C; all linear in the logs.

`Region` is the set lower <= G v <= upper.  It has a point, or the job is refused with the
numbers of the cell that fits least.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.errors import RealizationError
from synth.job import Job
from synth.parts import PartRule
from synth.peaks import SignalPeaks
from synth.quantities import show
from synth.scaling.variables import Variables

__all__ = ["Region", "ceilings", "region"]

Real = NDArray[np.float64]

# Internal outputs stay this far (a ratio) below their ceiling, so that the choice of standard
# values has room and part tolerance does not carry them over it.
CEILING_MARGIN = 0.1

# A level this far below its ceiling drowns in noise; no scaling goes lower.
LOWEST_LEVEL = 1e-6


@dataclass(frozen=True, eq=False)
class Region:
    """lower <= matrix v <= upper, each row with a name for messages."""

    matrix: Real
    lower: Real
    upper: Real
    names: tuple[str, ...]

    def start(self) -> tuple[Real, float]:
        """A point well inside and its margin: the smallest distance to any row's bounds, at
        most ln 3, in the units of v; negative when nothing fits (then the point that misses
        least)."""
        from scipy.optimize import linprog

        rows, columns = self.matrix.shape
        ones = np.ones((rows, 1))
        A = np.block([[self.matrix, ones], [-self.matrix, ones]])
        b = np.concatenate([self.upper, -self.lower])
        keep = np.isfinite(b)
        cost = np.zeros(columns + 1)
        cost[-1] = -1.0
        bounds = [(None, None)] * columns + [(None, math.log(3.0))]
        found = linprog(cost, A_ub=A[keep], b_ub=b[keep], bounds=bounds, method="highs")
        return np.asarray(found.x[:-1]), float(found.x[-1])

    def excess(self, v: Real) -> Real:
        """By how much each row misses its bounds at `v`, 0 where it holds."""
        value = self.matrix @ v
        return np.maximum(np.maximum(self.lower - value, value - self.upper), 0.0)


def ceilings(job: Job, peaks: SignalPeaks) -> dict[str, float]:
    """Highest level of every block [V per unit of signal]: rail and half the slew rate."""
    out = {}
    for name, peak in peaks.peak.items():
        swing = job.board.swing_limit / (job.signal.input_peak * peak)
        slew = job.board.op_amp.slew_rate / 2 / (job.signal.input_peak * peaks.rate[name])
        out[name] = min(swing, slew)
    return out


def region(variables: Variables, job: Job, peaks: SignalPeaks) -> Region:
    """Ceilings, and the ranges of every resistor and capacitor."""
    graph, board = variables.graph, job.board
    rows: list[Real] = []
    lower: list[float] = []
    upper: list[float] = []
    names: list[str] = []

    def add(row: Real, low: float, high: float, name: str) -> None:
        rows.append(row)
        lower.append(low)
        upper.append(high)
        names.append(name)

    for name, ceiling in ceilings(job, peaks).items():
        if variables.level_place(name) is not None:
            top = math.log(ceiling * (1 - CEILING_MARGIN))
            add(variables.level(name), top + math.log(LOWEST_LEVEL), top, f"level of {name}")
    for block in graph.blocks:
        rule = board.capacitors if block.is_integrator else board.resistors
        what = "capacitor" if block.is_integrator else "feedback resistor"
        low, high = math.log(rule.smallest), math.log(rule.largest)
        add(variables.size(block.name), low, high, f"{what} of {block.name}")
        low, high = math.log(board.resistors.smallest), math.log(board.resistors.largest)
        for term in block.terms:
            r, exponents = variables.resistance(block, term)
            add(exponents, low - math.log(r), high - math.log(r), f"{block.name} {term.source}")
    return Region(np.array(rows), np.array(lower), np.array(upper), tuple(names))


def refuse(variables: Variables, job: Job, v: Real) -> RealizationError:
    """The error for a job that fits nowhere, with the numbers of the worst cell at `v`."""
    rule = job.board.resistors
    worst, message = 0.0, ""
    for block in variables.graph.blocks:
        values = []
        for term in block.terms:
            r, exponents = variables.resistance(block, term)
            values.append(r * math.exp(float(exponents @ v)))
        low, high = min(values), max(values)
        miss = max(math.log(rule.smallest / low), math.log(high / rule.largest))
        if miss > worst:
            worst = miss
            size = math.exp(v[variables.size_place(block.name)])
            own = show(size, "F" if block.is_integrator else "ohm", 3)
            needed = dict.fromkeys(show(r, "ohm", 3) for r in (low, high))
            words = f"{'from' if len(needed) > 1 else 'of'} {' to '.join(needed)}"
            what = "" if block.is_integrator else " of feedback"
            message = f"{block.kind} {block.name} would need resistors {words} (with {own}{what})"
    caps = job.board.capacitors
    return RealizationError(
        f"board.resistors: no scaling fits: {message}, allowed are {_range(rule)} and "
        f"{_range(caps)}; widen these ranges, or choose another form or gain"
    )


def _range(rule: PartRule) -> str:
    unit = "ohm" if rule.kind == "resistor" else "F"
    return f"{show(rule.smallest, unit, 3)} to {show(rule.largest, unit, 3)}"
