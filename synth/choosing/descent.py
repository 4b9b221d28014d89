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
    def _steps(self) -> Index:
        return np.array([*self.reach, *(-m for m in self.reach)])

    @cached_property
    def _part(self) -> Index:
        return np.repeat(np.arange(len(self.grid.parts)), self._steps.size)

    @cached_property
    def _step(self) -> Index:
        return np.tile(self._steps, len(self.grid.parts))

    @property
    def pairs(self) -> int:
        """Pairs of steps one look evaluates, the quads counted as such."""
        return self._part.size**2 + self.quads**2

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
        steps = self._steps_from(index)
        if steps.part.size < 2:
            return None
        residual = self.model.residual(self.grid.logs_at(index))
        gram = steps.effects.T @ steps.effects
        single = 2 * (residual @ steps.effects) + np.diagonal(gram)
        pair = 2 * gram + single[:, None] + single[None, :]
        pair[np.equal.outer(steps.part, steps.part)] = np.inf
        if self.supply is not None:
            target = index[steps.part] + steps.step
            fits, both_fit = self.supply.steps(index, steps.part, target)
            single = np.where(fits, single, np.inf)
            pair = np.where(both_fit, pair, np.inf)
        alone, both = int(np.argmin(single)), int(np.argmin(pair))
        gain = -1e-12 * max(cost, 1e-18)
        if single[alone] <= pair.flat[both] and single[alone] < gain:
            return steps.taken(index, alone)
        if pair.flat[both] < gain:
            return steps.taken(index, *divmod(both, steps.part.size))
        return self._best_quad(index, steps, pair, gain) if self.quads else None

    def _best_quad(self, index: Index, steps: _Steps, pair: Real, gain: float) -> Index | None:
        """The best two of the cheapest pairs together, on four different parts."""
        rows, columns = np.triu_indices(steps.part.size, k=1)
        costs = pair[rows, columns]
        allowed = np.isfinite(costs)
        rows, columns, costs = rows[allowed], columns[allowed], costs[allowed]
        if costs.size < 2:
            return None
        count = min(self.quads, costs.size - 1)
        chosen = np.argpartition(costs, count)[:count]
        a, b = rows[chosen], columns[chosen]
        joint = steps.effects[:, a] + steps.effects[:, b]
        total = 2 * (joint.T @ joint) + costs[chosen][:, None] + costs[chosen][None, :]
        for left in (steps.part[a], steps.part[b]):
            for right in (steps.part[a], steps.part[b]):
                total[np.equal.outer(left, right)] = np.inf
        best = int(np.argmin(total))
        if not total.flat[best] < gain:
            return None
        i, j = divmod(best, count)
        moved = steps.taken(index, int(a[i]), int(b[i]), int(a[j]), int(b[j]))
        enough = self.supply is None or self.supply.suffices(moved)
        return moved if enough else None

    def _steps_from(self, index: Index) -> _Steps:
        """The steps that stay within the lists of values, and what each does."""
        target = index[self._part] + self._step
        inside = (target >= 0) & (target < self.grid.counts[self._part])
        inside &= ~self.grid.fine[self._part]
        part, step, target = self._part[inside], self._step[inside], target[inside]
        change = self.grid.logs[part, target] - self.grid.logs_at(index)[part]
        return _Steps(part, step, self.model.matrix[:, part] * change)


@dataclass(frozen=True, eq=False)
class _Steps:
    """Possible steps: of which part, how many places, and the change of the residual (K, n)."""

    part: Index
    step: Index
    effects: Real

    def taken(self, index: Index, *moves: int) -> Index:
        """`index` after some of the steps, each of another part."""
        out = index.copy()
        for move in moves:
            out[self.part[move]] += self.step[move]
        return out
