"""The best choices of all, exactly: branch and bound, and sums of parts that act alike.

In the response many parts do the same thing: the resistor into an integrator, its capacitor
and both resistors of the inverter before it all move one product.  Once every other part has
its value, the best values of such a class are a matter of one number: the sum of their
effects that comes nearest to what is left along their direction.  All sums are made once and
sorted; the other parts are assigned one by one, as far as their bound stays below what is
asked (see `synth.choosing.binding`), and each assignment finds its completions by bisection,
in the order of their error, until one keeps the limits of the levels and the stock.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.choosing.binding import Frontier, binding_order
from synth.choosing.grid import ValueGrid
from synth.choosing.model import LevelLimits, LinearModel
from synth.choosing.supply import Supply

__all__ = ["Completed", "Completion", "aligned", "best_choices"]

Real = NDArray[np.float64]
Index = NDArray[np.intp]

# Columns of the matrix that differ in direction by less are of one class: op-amps as good as
# ideal leave 1e-6 of a difference, parts with tasks of their own leave a tenth and more.
PARALLEL = 1e-5

# Most sums that are made and sorted: a hundredth of a second.  Further parts of the class are
# assigned last, when hardly any assignments are left.
LARGEST_SUMS = 100_000

# Most partial assignments held at once.
LARGEST_FRONTIER = 400_000

# Most completions looked at together, and the most in all before the matter is given up.
CHUNK = 1_000_000
LARGEST_LOOK = 30_000_000

# Choices kept for the whole circuit to judge, and how far above the best they may be: what the
# model leaves out, op-amps that move with the values, may be as large as its smallest errors.
KEPT = 400
KEPT_RATIO = 4.0


@dataclass(frozen=True, eq=False)
class Completed:
    """The best choices there are.

    Attributes
    ----------
    squares
        |residual|^2 of the best choices that keep the limits, ascending, shape (N,); empty
        where none is below what was asked.
    index
        Index vectors into the grid, shape (N, P).
    looked
        How many assignments and completions were evaluated.
    """

    squares: Real
    index: Index
    looked: int


@dataclass(frozen=True, eq=False)
class Completion:
    """A class of parts and the sums of their effects.

    Attributes
    ----------
    model, grid
        As of the partial assignments; the columns of the class are multiples of `direction`.
    parts
        Those of the class whose sums are made.
    others
        Those of the class that are to be assigned before.
    direction
        Unit vector, shape (K,).
    """

    model: LinearModel
    grid: ValueGrid
    parts: tuple[int, ...]
    others: tuple[int, ...]
    direction: Real

    @property
    def count(self) -> int:
        """How many combinations of values there are."""
        return int(_combinations(self.grid, self.parts))

    @property
    def sums(self) -> Real:
        """Effects of every combination of values along `direction`, ascending, shape (N,)."""
        return self._sorted[0]

    @property
    def places(self) -> Index:
        """Which combination each sum is: flat index over the lists of values, shape (N,)."""
        return self._sorted[1]

    @cached_property
    def _sorted(self) -> tuple[Real, Index]:
        sums = np.zeros(1)
        for k in self.parts:
            change = self.grid.logs[k, : self.grid.counts[k]] - self.model.reference[k]
            along = float(self.direction @ self.model.matrix[:, k])
            sums = np.add.outer(sums, along * change).ravel()
        places = np.argsort(sums, kind="stable")
        return sums[places], places

    @classmethod
    def of(
        cls, model: LinearModel, grid: ValueGrid, *, largest: int = LARGEST_SUMS
    ) -> Completion | None:
        """The class with the most combinations of at most `largest`; None where no part has a
        choice that matters.

        A class with more leaves out those of its parts that have the most values.
        """
        best: tuple[int, ...] = ()
        others: tuple[int, ...] = ()
        for members in _classes(model.matrix, grid):
            kept = sorted(members, key=lambda k: (grid.counts[k], k))
            while np.prod(grid.counts[kept], dtype=float) > largest:
                kept.pop()
            if kept and _combinations(grid, kept) > _combinations(grid, best):
                best = tuple(sorted(kept))
                others = tuple(k for k in members if k not in kept)
        if not best:
            return None
        column = model.matrix[:, best[0]]
        return cls(model, grid, best, others, column / np.linalg.norm(column))

    def complete(
        self,
        frontier: Frontier,
        *,
        below: float,
        limits: LevelLimits | None = None,
        supply: Supply | None = None,
        largest: int = LARGEST_LOOK,
    ) -> Completed | None:
        """The best completions of `frontier` whose |residual|^2 is below `below`.

        Parameters
        ----------
        frontier
            Assignments of every part with a choice that is not in the class.
        limits, supply
            What a choice must keep.
        largest
            How many completions are looked at; None comes back where there are more.
        """
        wanted = -(self.direction @ frontier.residuals)
        across = np.sum(frontier.residuals**2, axis=0) - wanted**2
        order = np.argsort(across, kind="stable")
        keeper = _Keeper(self, frontier, limits, supply, below)
        looked = start = 0
        while start < order.size and across[order[start]] < keeper.below:
            rows = order[start : start + CHUNK // 8]
            reach = np.sqrt(np.maximum(keeper.below - across[rows], 0.0))
            low = np.searchsorted(self.sums, wanted[rows] - reach, side="left")
            high = np.searchsorted(self.sums, wanted[rows] + reach, side="right")
            counts = np.cumsum(high - low)
            taken = max(1, int(np.searchsorted(counts, CHUNK, side="right")))
            looked += int(counts[min(taken, counts.size) - 1])
            if looked > largest:
                return None
            rows, low, high = rows[:taken], low[:taken], high[:taken]
            who = np.repeat(np.arange(rows.size), high - low)
            before = np.concatenate([[0], np.cumsum(high - low)[:-1]])
            place = np.arange(who.size) - before[who] + low[who]
            squares = across[rows][who] + (wanted[rows][who] - self.sums[place]) ** 2
            keeper.offer(squares, rows[who], place)
            start += rows.size
        return Completed(keeper.squares, keeper.index, looked)

    def values_of(self, place: Index) -> Index:
        """Indices into the grid of each part of the class, shape (parts, N)."""
        shape = tuple(int(n) for n in self.grid.counts[list(self.parts)])
        return np.array(np.unravel_index(self.places[place], shape))


class _Keeper:
    """The best completions so far that keep the limits."""

    def __init__(
        self,
        completion: Completion,
        frontier: Frontier,
        limits: LevelLimits | None,
        supply: Supply | None,
        below: float,
    ) -> None:
        self.completion, self.frontier = completion, frontier
        self.limits, self.supply = limits, supply
        self.below = below
        self.squares, self.index = np.empty(0), np.empty((0, completion.grid.counts.size), int)

    def offer(self, squares: Real, rows: Index, place: Index) -> None:
        """Completions by their error, the assignment they complete, and their sum."""
        order = np.argsort(squares, kind="stable")
        order = order[squares[order] < self.below]
        step = KEPT
        while order.size and squares[order[0]] < self.below:
            # In ever larger lots, the best first: mostly the first lot settles it.
            lot, order = order[:step], order[step:]
            step = min(8 * step, 100_000)
            index = self._indices(rows[lot], place[lot])
            held = self._hold(index)
            if np.any(held):
                self._keep(squares[lot][held], index[held])

    def _indices(self, rows: Index, place: Index) -> Index:
        index = np.zeros((rows.size, self.completion.grid.counts.size), dtype=np.intp)
        index[:, list(self.frontier.parts)] = self.frontier.chosen[:, rows].T
        index[:, list(self.completion.parts)] = self.completion.values_of(place).T
        return index

    def _hold(self, index: Index) -> NDArray[np.bool_]:
        held = np.ones(len(index), dtype=bool)
        if self.limits is not None:
            parts = np.arange(index.shape[1])
            change = self.completion.grid.logs[parts, index] - self.limits.reference
            held = np.all(change @ self.limits.matrix.T <= self.limits.slack + 1e-9, axis=1)
        if self.supply is not None:
            for k in np.flatnonzero(held):
                held[k] = self.supply.suffices(index[k])
        return held

    def _keep(self, squares: Real, index: Index) -> None:
        squares = np.concatenate([self.squares, squares])
        index = np.concatenate([self.index, index])
        best = np.argsort(squares, kind="stable")[:KEPT]
        self.squares, self.index = squares[best], index[best]
        self.below = min(self.below, float(self.squares[0]) * KEPT_RATIO)


def best_choices(
    grid: ValueGrid,
    model: LinearModel,
    *,
    below: float,
    limits: LevelLimits | None = None,
    supply: Supply | None = None,
    largest_frontier: int = LARGEST_FRONTIER,
    largest_sums: int = LARGEST_SUMS,
) -> Completed | None:
    """The best of all choices from `grid`, those whose |residual|^2 is below `below`.

    Parameters
    ----------
    model
        With aligned columns.
    limits, supply
        What a choice must keep.
    largest_frontier, largest_sums
        How much is held at once; None comes back where that is too little.
    """
    completion = Completion.of(model, grid, largest=largest_sums)
    if completion is None:
        return None
    alike = {*completion.parts, *completion.others}
    order = [k for k in binding_order(model.matrix, grid)[0] if k not in alike]
    order += completion.others
    frontier, looked = Frontier.start(model, grid), completion.count
    for place, part in enumerate(order):
        columns = model.matrix[:, [*order[place + 1 :], *completion.parts]]
        looked += frontier.count * int(grid.counts[part])
        grown = frontier.grown(part, columns, below=below, largest=largest_frontier)
        if grown is None:
            return None
        frontier = grown
    found = completion.complete(frontier, below=below, limits=limits, supply=supply)
    return found and replace(found, looked=looked + found.looked)


def aligned(model: LinearModel, grid: ValueGrid) -> LinearModel:
    """The model with the columns of each class made exact multiples of one direction."""
    matrix = model.matrix.copy()
    for members in _classes(model.matrix, grid):
        first = matrix[:, members[0]] / np.linalg.norm(matrix[:, members[0]])
        for k in members:
            matrix[:, k] = float(first @ matrix[:, k]) * first
    return replace(model, matrix=matrix)


def _classes(matrix: Real, grid: ValueGrid) -> list[list[int]]:
    """Parts with a choice whose columns are parallel, in the order of their first part."""
    lengths = np.linalg.norm(matrix, axis=0)
    waiting = [int(k) for k in np.flatnonzero((grid.counts > 1) & (lengths > 0))]
    found: list[list[int]] = []
    while waiting:
        first = matrix[:, waiting[0]] / lengths[waiting[0]]
        others = matrix[:, waiting]
        away = np.linalg.norm(others - np.outer(first, first @ others), axis=0)
        alike = away <= PARALLEL * lengths[waiting]
        found.append([k for k, same in zip(waiting, alike, strict=True) if same])
        waiting = [k for k, same in zip(waiting, alike, strict=True) if not same]
    return found


def _combinations(grid: ValueGrid, parts: list[int] | tuple[int, ...]) -> float:
    return float(np.prod(grid.counts[list(parts)], dtype=float)) if parts else 0.0
