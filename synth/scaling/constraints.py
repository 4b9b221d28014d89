"""What no scaling may break: ceilings of levels, ranges of R and C; all linear in the logs.

`Region` is the set lower <= G v <= upper.  It has a point, or the job is refused with the
numbers of the cell that fits least.  Values the job fixes are rows with equal bounds; where no
scaling has them all exactly, each is missed by as little as can be, as a ratio, and the
choice of values makes up for it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.errors import RealizationError
from synth.fixing import FixedParts
from synth.graph import INPUT, BlockGraph
from synth.job import Job
from synth.parts import PartRule
from synth.peaks import SignalPeaks
from synth.quantities import show
from synth.scaling.variables import Variables

__all__ = ["LARGEST_MISS", "Region", "ceilings", "refuse", "refuse_fixed", "region"]

Real = NDArray[np.float64]

# Internal outputs stay this far (a ratio) below their ceiling, so that the choice of standard
# values has room and part tolerance does not carry them over it.
CEILING_MARGIN = 0.1

# A level this far below its ceiling drowns in noise; no scaling goes lower.
LOWEST_LEVEL = 1e-6

# What a row missed by 1 costs beside a margin of 1: more than it, so that no row is missed for it.
PER_MISS = 4.0

# A dual value below this, beside those of at least some share of one, is rounding.
NO_PRICE = 1e-7

# Fixed values that miss what H(s) asks for by more than this, in ln, are refused: a quarter.
LARGEST_MISS = math.log(1.25)


@dataclass(frozen=True, eq=False)
class Region:
    """lower <= matrix v <= upper, each row with a name for messages.

    `fixed` (rows,) marks the rows of values the job fixes, `refs` names their parts by row.
    """

    matrix: Real
    lower: Real
    upper: Real
    names: tuple[str, ...]
    fixed: NDArray[np.bool_]
    refs: dict[int, str]

    def start(self) -> tuple[Real, float]:
        """A point well inside and its margin: the smallest distance to any row's bounds, at
        most ln 3, in the units of v; negative when nothing fits (then the point that misses
        least)."""
        from scipy.optimize import linprog

        columns = self.matrix.shape[1]
        ones = np.where(self.fixed, 0.0, 1.0)[:, None]
        A = np.block([[self.matrix, ones], [-self.matrix, ones]])
        b = np.concatenate([self.upper, -self.lower])
        keep = np.isfinite(b)
        cost = np.zeros(columns + 1)
        cost[-1] = -1.0
        bounds = [(None, None)] * columns + [(None, math.log(3.0))]
        found = linprog(cost, A_ub=A[keep], b_ub=b[keep], bounds=bounds, method="highs")
        return np.asarray(found.x[:-1]), float(found.x[-1])

    def room(self) -> tuple[float, tuple[str, ...]]:
        """How much room there is, in ln, and the names of the rows that keep it from being more.

        The room is the margin of `start` where something fits, otherwise the least sum of what
        the rows miss, times `-PER_MISS`.  By duality no change to any other row gives more.
        Values the job fixes count as free.
        """
        from scipy.optimize import linprog

        rows, columns = self.matrix.shape
        free = self.without_fixed()
        margin, missed = np.where(self.fixed, 0.0, 1.0)[:, None], -np.eye(rows)
        A = np.block([[self.matrix, margin, missed], [-self.matrix, margin, missed]])
        b = np.concatenate([free.upper, -free.lower])
        keep = np.isfinite(b)
        cost = np.concatenate([np.zeros(columns), [-1.0], np.full(rows, PER_MISS)])
        bounds = [(None, None)] * columns + [(0, math.log(3.0))] + [(0, None)] * rows
        found = linprog(cost, A_ub=A[keep], b_ub=b[keep], bounds=bounds, method="highs")
        price = np.zeros(b.size)
        price[keep] = -found.ineqlin.marginals
        prices = price[:rows] + price[rows:]
        return -float(found.fun), tuple(
            n for n, p in zip(self.names, prices, strict=True) if p > NO_PRICE
        )

    def without_fixed(self) -> Region:
        """The region with every fixed value free within its range."""
        lower, upper = self.lower.copy(), self.upper.copy()
        lower[self.fixed], upper[self.fixed] = -np.inf, np.inf
        return replace(self, lower=lower, upper=upper)

    def least_miss(self) -> tuple[Real, float]:
        """A point at which the fixed values are missed by as little as can be, and by how much,
        in ln; infinite when the other limits alone leave no point."""
        from scipy.optimize import linprog

        columns = self.matrix.shape[1]
        ones = np.where(self.fixed, 1.0, 0.0)[:, None]
        A = np.block([[self.matrix, -ones], [-self.matrix, -ones]])
        b = np.concatenate([self.upper, -self.lower])
        keep = np.isfinite(b)
        cost = np.zeros(columns + 1)
        cost[-1] = 1.0
        bounds = [(None, None)] * columns + [(0, None)]
        found = linprog(cost, A_ub=A[keep], b_ub=b[keep], bounds=bounds, method="highs")
        if found.status != 0:
            return np.zeros(columns), math.inf
        return np.asarray(found.x[:-1]), float(found.x[-1])

    def eased(self, miss: float) -> Region:
        """The region with fixed values to be met within `miss`, in ln."""
        room = np.where(self.fixed, miss, 0.0)
        return replace(self, lower=self.lower - room, upper=self.upper + room)

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


def least_on_source(graph: BlockGraph, job: Job) -> float:
    """Least resistance of a resistor on the net of the source [ohm], so that all of them
    together, an inverter's too, draw at most half of its voltage."""
    readers = len(graph.readers(INPUT)) + 1
    return max(2 * readers * job.signal.source_resistance, job.board.resistors.smallest)


def region(variables: Variables, job: Job, peaks: SignalPeaks, held: FixedParts) -> Region:
    """Ceilings, the ranges of every resistor and capacitor, and the values in `held`."""
    graph, board = variables.graph, job.board
    fixed: dict[int, str] = {}
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
        low, high = map(math.log, rule.ends)
        if block.name in held.sizes:
            fixed[len(rows)] = held.refs[block.name]
            low = high = math.log(held.sizes[block.name])
        add(variables.size(block.name), low, high, f"{what} of {block.name}")
        for place, term in enumerate(block.terms):
            low, high = map(math.log, board.resistors.ends)
            if term.source == INPUT:
                low = max(low, min(high, math.log(least_on_source(graph, job))))
            if (block.name, place) in held.terms:
                fixed[len(rows)] = held.refs[block.name, place]
                low = high = math.log(held.terms[block.name, place])
            r, exponents = variables.resistance(block, term)
            r *= held.factors.get((block.name, place), 1.0)
            add(exponents, low - math.log(r), high - math.log(r), f"{block.name} {term.source}")
    marks = np.array([k in fixed for k in range(len(rows))])
    return Region(np.array(rows), np.array(lower), np.array(upper), tuple(names), marks, fixed)


def refuse_fixed(
    variables: Variables, limits: Region, v: Real, held: FixedParts
) -> RealizationError:
    """The error for fixed values no scaling comes near, with what the worst would have to be."""
    away = np.where(limits.fixed, limits.matrix @ v - limits.upper, 0.0)
    row = int(np.argmax(np.abs(away)))
    ref = limits.refs[row]
    stated, unit = held.values[ref], _unit(ref)
    needed = stated * math.exp(float(away[row]))
    others = ", ".join(f"{r} = {show(x, _unit(r))}" for r, x in held.values.items() if r != ref)
    beside = f" beside {others}" if others else ""
    return RealizationError(
        f"board.fixed.{ref}: got {show(stated, unit)}{beside}, but the {variables.graph.form} "
        f"form would need about {show(needed, unit)}; expected another value, or fewer fixed"
    )


def _unit(ref: str) -> str:
    return "F" if ref.startswith("C") else "ohm"


def refuse(variables: Variables, job: Job, v: Real) -> RealizationError:
    """The error for a job that fits nowhere, with the numbers of the worst cell at `v`."""
    smallest, largest = job.board.resistors.ends
    worst, message = 0.0, "the levels of the signals leave no room"
    for block in variables.graph.blocks:
        values = []
        for term in block.terms:
            r, exponents = variables.resistance(block, term)
            values.append(r * math.exp(float(exponents @ v)))
        low, high = min(values), max(values)
        miss = max(math.log(smallest / low), math.log(high / largest))
        if miss > worst:
            worst = miss
            size = math.exp(v[variables.size_place(block.name)])
            own = show(size, "F" if block.is_integrator else "ohm", 3)
            needed = dict.fromkeys(show(r, "ohm", 3) for r in (low, high))
            words = f"{'from' if len(needed) > 1 else 'of'} {' to '.join(needed)}"
            what = "" if block.is_integrator else " of feedback"
            message = f"{block.kind} {block.name} would need resistors {words} (with {own}{what})"
    caps = job.board.capacitors
    key, advice = "board.resistors", "widen these ranges"
    if job.board.resistors.stock or caps.stock:
        key, advice = "board.stock", "add values to the drawer"
    return RealizationError(
        f"{key}: no scaling fits: {message}, allowed are {_range(job.board.resistors)} "
        f"and {_range(caps)}; {advice}, or choose another form or gain"
    )


def _range(rule: PartRule) -> str:
    unit = "ohm" if rule.kind == "resistor" else "F"
    low, high = rule.ends
    return f"{show(low, unit, 3)} to {show(high, unit, 3)}"
