"""From a found choice to the best there is: exact choices of all parts, or of some at a time.

The linear model holds the op-amps' error as it is at one choice of values; a choice that is
best in it moves the op-amps' error too, so the whole circuit judges, and the model is made
again about the best choice so far, until nothing better is found.  Where a circuit is too
large for the exact search, some of its parts are chosen exactly while all others keep their
values, again and again with other parts.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.choosing.certificate import Certificate, certify
from synth.choosing.completion import LARGEST_FRONTIER, aligned, best_choices
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Ceilings, Goal, LinearModel
from synth.choosing.supply import Supply
from synth.nodal import NodalProgram

__all__ = ["Problem", "settle"]

Real = NDArray[np.float64]
Index = NDArray[np.intp]

# About so many choices the model is made anew, at most, after the last one that gained.
PATIENCE = 16

# A gain smaller than this, as a ratio of the rms error, is none.
LEAST_GAIN = 1e-4

# Parts chosen exactly at a time, at least and at most, and what that may hold: fewer hardly ever
# gain, more are mostly too many.
SUBSET = (6, 9)
SUBSET_FRONTIER = 40_000
SUBSET_SUMS = 20_000

# Subsets tried about one model, and how many such rounds in a row may bring nothing.
SUBSETS_PER_ROUND = 16
FRUITLESS_ROUNDS = 12

# What work here counts for, in pairs of steps of the search, by the time it takes: one assignment
# or completion, one subset beside those, one board solved.
PAIRS_PER_ASSIGNMENT = 4
PAIRS_PER_SUBSET = 150_000
PAIRS_PER_BOARD = 2_000

# Effort that justifies holding one more assignment when all parts are chosen.
EFFORT_PER_ASSIGNMENT = 150


@dataclass(frozen=True, eq=False, kw_only=True)
class Problem:
    """A choice of values as the exact search sees it.

    Parameters
    ----------
    program, ideal
        The circuit, and the same with ideal op-amps.
    goal, grid
        What it must show, and the values on offer.
    ceilings, supply
        What a choice must keep.
    """

    program: NodalProgram
    ideal: NodalProgram
    goal: Goal
    grid: ValueGrid
    ceilings: Ceilings | None
    supply: Supply | None

    def eased(self, grid: ValueGrid) -> Problem:
        """The same with other values on offer, and every level free to fall."""
        ceilings = None if self.ceilings is None else self.ceilings.without_floors()
        return replace(self, grid=grid, ceilings=ceilings, supply=Supply.of(grid))

    def raised(self, values: Real) -> Problem:
        """The same with no level bound to be below what it is with `values` (P,)."""
        if self.ceilings is None:
            return self
        return replace(self, ceilings=self.ceilings.raised(self.program, values))

    def model(self, values: Real) -> LinearModel:
        """The response about `values` (P,), the matrix with ideal op-amps."""
        return LinearModel.about(self.program, values, self.goal, jacobian=self.ideal)

    def judged(self, index: Index) -> Real:
        """Mean square error of each choice (N, P) by the whole circuit, infinite where an output
        leaves its bounds."""
        values = np.array([self.grid.values_at(k) for k in index])
        squares = self.goal.mean_squares(self.program, values)
        if self.ceilings is not None:
            squares = np.where(self.ceilings.keep(self.program, values), squares, np.inf)
        return squares


def settle(
    problem: Problem, start: Index, *, rng: np.random.Generator, effort: int
) -> tuple[Index, Certificate, int]:
    """The best choice found from `start` (P,) on, what is known of it, and the work done, in
    pairs of steps of the search.

    `effort` bounds the work, that of choosing all parts and that of choosing some at a time
    each, and how much is held to choose all.  A start that does not keep the limits is only
    improved on by choices that do.
    """
    held = max(1, min(LARGEST_FRONTIER, effort // EFFORT_PER_ASSIGNMENT))
    best, certificate, looked = _exact_rounds(problem, start, held, effort)
    if certificate.exhausted or certificate.proven:
        return best, certificate, looked
    improved, more = _by_subsets(problem, best, rng, effort)
    looked += more
    if not np.array_equal(improved, best):
        best, certificate, more = _exact_rounds(problem, improved, held, effort)
        looked += more
    return best, certificate, looked


def _exact_rounds(
    problem: Problem, start: Index, held: int, effort: int
) -> tuple[Index, Certificate, int]:
    """Exact searches about one choice after the other, holding so many assignments, and the
    certificate of the best; no further one when the work reaches `effort`."""
    best, best_square = start, float(problem.judged(start[None])[0])
    seen: dict[tuple[int, ...], float] = {tuple(map(int, start)): best_square}
    used: set[tuple[int, ...]] = set()
    about, certificate, looked, patience = start, None, 0, PATIENCE
    while True:
        used.add(tuple(map(int, about)))
        found = _certified(problem, about, held)
        looked += PAIRS_PER_ASSIGNMENT * found.looked
        if np.array_equal(about, best):
            certificate = found
        if found.better is None:
            if certificate is found:
                break
        else:
            squares = problem.judged(found.better)
            looked += PAIRS_PER_BOARD * squares.size
            for k, square in zip(found.better, squares, strict=True):
                seen[tuple(map(int, k))] = float(square)
        patience -= 1
        leader = min(seen, key=lambda k: (seen[k], k))
        if seen[leader] < best_square * (1 - LEAST_GAIN) ** 2:
            best, best_square, certificate = np.array(leader), seen[leader], None
            patience = PATIENCE
        fresh = [k for k in seen if k not in used and seen[k] < np.inf]
        if patience < 0 or not fresh or looked >= effort:
            break
        about = np.array(min(fresh, key=lambda k: (seen[k], k)))
    return best, certificate or _certified(problem, best, held), looked


def _certified(problem: Problem, index: Index, held: int) -> Certificate:
    """How good a choice is, in the model about itself."""
    values = problem.grid.values_at(index)
    limits = None if problem.ceilings is None else problem.ceilings.about(problem.program, values)
    return certify(problem.grid, problem.model(values), index, limits=limits, supply=problem.supply)


def _by_subsets(
    problem: Problem, start: Index, rng: np.random.Generator, effort: int
) -> tuple[Index, int]:
    """The best choice found by choosing a few parts exactly at a time."""
    free = np.flatnonzero(problem.grid.counts > 1)
    best, best_square = start, float(problem.judged(start[None])[0])
    looked = fruitless = 0
    while looked < effort and fruitless < FRUITLESS_ROUNDS:
        values = problem.grid.values_at(best)
        model = aligned(problem.model(values), problem.grid)
        limits = None
        if problem.ceilings is not None:
            limits = problem.ceilings.about(problem.program, values)
        square = model.mean_square(np.log(values)) - model.floor
        offers: list[Index] = []
        for _ in range(SUBSETS_PER_ROUND):
            count = min(int(rng.integers(SUBSET[0], SUBSET[1] + 1)), free.size)
            chosen = np.sort(rng.choice(free, size=count, replace=False))
            found = best_choices(
                _holding(problem.grid, best, chosen),
                model,
                below=square * (1 - LEAST_GAIN),
                limits=limits,
                supply=None,
                largest_frontier=SUBSET_FRONTIER,
                largest_sums=SUBSET_SUMS,
            )
            assigned = found.looked if found else SUBSET_FRONTIER
            looked += PAIRS_PER_SUBSET + PAIRS_PER_ASSIGNMENT * assigned
            for k in found.index[:8] if found else ():
                whole = best.copy()
                whole[chosen] = k[chosen]
                if problem.supply is None or problem.supply.suffices(whole):
                    offers.append(whole)
        fruitless += 1
        if offers:
            squares = problem.judged(np.array(offers))
            looked += PAIRS_PER_BOARD * squares.size
            k = int(np.argmin(squares))
            if squares[k] < best_square * (1 - LEAST_GAIN) ** 2:
                best, best_square, fruitless = offers[k], float(squares[k]), 0
    return best, looked


def _holding(grid: ValueGrid, index: Index, free: Index) -> ValueGrid:
    """The grid with every part but `free` held at its value."""
    values = grid.values_at(index)
    parts = tuple(
        p if k in free else replace(p, fixed=True, value=float(values[k]))
        for k, p in enumerate(grid.parts)
    )
    return ValueGrid(parts, grid.near)
