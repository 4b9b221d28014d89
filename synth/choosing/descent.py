"""Descent over index vectors: the best single or pair of steps until none gains.

The cost of any two steps together follows from one Gram matrix of the steps' effects, so a
whole neighbourhood of pairs costs one small matrix product.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.choosing.grid import ValueGrid
from synth.choosing.model import LinearModel
from synth.choosing.supply import Supply

__all__ = ["Neighbourhood"]

Real = NDArray[np.float64]
Index = NDArray[np.intp]

# Its square, beside costs: never the best.
FAR = 1e100


@dataclass(frozen=True, eq=False)
class Neighbourhood:
    """Steps of every part by `reach` places along its series, either way.

    `quads` pairs of steps with the lowest cost are also tried two at a time when no pair
    gains; 0 leaves that out.  With a `supply`, no step asks for more parts than there are.
    Parts with a list as good as continuous take no steps.
    """

    grid: ValueGrid
    model: LinearModel
    reach: tuple[int, ...] = (1, 2, 3)
    quads: int = 0
    supply: Supply | None = None

    @cached_property
    def _part(self) -> Index:
        """Of which part each step is, shape (n,)."""
        movable = np.flatnonzero((self.grid.counts > 1) & ~self.grid.fine)
        return np.repeat(movable, 2 * len(self.reach))

    @cached_property
    def _step(self) -> Index:
        """How many places each step goes, shape (n,)."""
        steps = np.array([*self.reach, *(-m for m in self.reach)])
        return np.tile(steps, self._part.size // steps.size)

    @cached_property
    def _gram(self) -> Real:
        """Twice the products of the effects of a step each, per change of ln, shape (n, n)."""
        effects = self.model.matrix[:, self._part]
        return np.asarray(2 * effects.T @ effects)

    @cached_property
    def _clash(self) -> Real:
        """Infinite for two steps of one part, else 0, shape (n, n)."""
        return np.where(np.equal.outer(self._part, self._part), np.inf, 0.0)

    @cached_property
    def _couples(self) -> tuple[Index, Index]:
        """All pairs of steps of two parts, each once."""
        first, second = np.nonzero(np.triu(np.isfinite(self._clash)))
        return first, second

    @property
    def pairs(self) -> int:
        """Pairs of steps one look evaluates, the quads counted as such."""
        return (2 * len(self.reach) * len(self.grid.parts)) ** 2 + self.quads**2

    def descend(self, index: Index) -> tuple[Index, float, int]:
        """A local minimum from `index`: index vector, |residual|^2, and how many
        neighbourhoods were looked at."""
        looked = 0
        cost = self._cost(index)
        while True:
            looked += 1
            moved = self._best_move(index, cost)
            if moved is None:
                return index, cost, looked
            fresh = self._cost(moved)
            if fresh >= cost * (1 - 1e-9):
                return index, cost, looked
            index, cost = moved, fresh

    def _cost(self, index: Index) -> float:
        residual = self.model.residual(self.grid.logs_at(index))
        return float(residual @ residual)

    def _best_move(self, index: Index, cost: float) -> Index | None:
        """`index` after the best step, two steps or four, None where none gains."""
        target = index[self._part] + self._step
        inside = (target >= 0) & (target < self.grid.counts[self._part])
        if not inside.any():
            return None
        target = np.where(inside, target, index[self._part])
        logs = self.grid.logs_at(index)
        change = self.grid.logs[self._part, target] - logs[self._part]
        slope = 2 * (self.model.residual(logs) @ self.model.matrix)[self._part]
        single = change * (slope + 0.5 * np.diagonal(self._gram) * change)
        single[~inside] = np.inf
        pair = self._gram * change
        pair *= change[:, None]
        pair += single
        pair += single[:, None]
        pair += self._clash
        if self.supply is not None:
            fits, both_fit = self.supply.steps(index, self._part, target)
            single = np.where(fits, single, np.inf)
            pair = np.where(both_fit, pair, np.inf)
        alone, both = int(np.argmin(single)), int(np.argmin(pair))
        gain = -1e-12 * max(cost, 1e-18)
        if single[alone] <= pair.flat[both] and single[alone] < gain:
            return self._taken(index, alone)
        if pair.flat[both] < gain:
            return self._taken(index, *divmod(both, change.size))
        return self._best_quad(index, change, pair, gain) if self.quads else None

    def _best_quad(self, index: Index, change: Real, pair: Real, gain: float) -> Index | None:
        """The best two of the cheapest pairs together, on four different parts."""
        rows, columns = self._couples
        costs = pair[rows, columns]
        if costs.size > self.quads:
            chosen = np.argpartition(costs, self.quads)[: self.quads]
            rows, columns, costs = rows[chosen], columns[chosen], costs[chosen]
        possible = np.isfinite(costs)
        a, b, costs = rows[possible], columns[possible], costs[possible]
        if costs.size < 2:
            return None
        effects = self.model.matrix[:, self._part] * change
        joint = effects[:, a] + effects[:, b]
        total = 2 * (joint.T @ joint)
        total += costs
        total += costs[:, None]
        used = np.zeros((costs.size, index.size))
        each = np.arange(costs.size)
        used[each, self._part[a]] = used[each, self._part[b]] = FAR
        total += used @ used.T
        best = int(np.argmin(total))
        if not total.flat[best] < gain:
            return None
        i, j = divmod(best, costs.size)
        moved = self._taken(index, int(a[i]), int(b[i]), int(a[j]), int(b[j]))
        enough = self.supply is None or self.supply.suffices(moved)
        return moved if enough else None

    def _taken(self, index: Index, *moves: int) -> Index:
        """`index` after some of the steps, each of another part."""
        out = index.copy()
        for move in moves:
            out[self._part[move]] += self._step[move]
        return out
