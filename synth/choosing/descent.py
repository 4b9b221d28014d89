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

__all__ = ["Neighbourhood"]

Real = NDArray[np.float64]
Index = NDArray[np.intp]

# A step that is not there costs so much that no pair with it is ever taken.
_FORBIDDEN = 1e6


@dataclass(frozen=True, eq=False)
class Neighbourhood:
    """Steps of every part by `reach` places along its series, either way.

    `quads` pairs of steps with the lowest cost are also tried two at a time when no pair
    gains; 0 leaves that out.
    """

    grid: ValueGrid
    model: LinearModel
    reach: tuple[int, ...] = (1, 2, 3)
    quads: int = 0

    @cached_property
    def _steps(self) -> Index:
        return np.array([*self.reach, *(-m for m in self.reach)])

    @cached_property
    def _part(self) -> Index:
        return np.repeat(np.arange(len(self.grid.parts)), self._steps.size)

    @cached_property
    def _step(self) -> Index:
        return np.tile(self._steps, len(self.grid.parts))

    @cached_property
    def _same_part(self) -> NDArray[np.bool_]:
        return np.equal.outer(self._part, self._part)

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
        effects = self._effects(index)
        residual = self.model.residual(self.grid.logs_at(index))
        gram = effects.T @ effects
        single = 2 * (residual @ effects) + np.diagonal(gram)
        pair = 2 * gram + single[:, None] + single[None, :]
        pair[self._same_part] = _FORBIDDEN
        alone, both = int(np.argmin(single)), int(np.argmin(pair))
        gain = -1e-12 * max(cost, 1e-18)
        if single[alone] <= pair.flat[both] and single[alone] < gain:
            return self._moved(index, (alone,))
        if pair.flat[both] < gain:
            return self._moved(index, divmod(both, self._part.size))
        return self._best_quad(index, effects, pair, residual, gain) if self.quads else None

    def _best_quad(
        self, index: Index, effects: Real, pair: Real, residual: Real, gain: float
    ) -> Index | None:
        """The best two of the cheapest pairs together, on four different parts."""
        rows, columns = np.triu_indices(self._part.size, k=1)
        costs = pair[rows, columns]
        count = min(self.quads, costs.size - 1)
        chosen = np.argpartition(costs, count)[:count]
        a, b = rows[chosen], columns[chosen]
        joint = effects[:, a] + effects[:, b]
        total = 2 * (joint.T @ joint) + costs[chosen][:, None] + costs[chosen][None, :]
        pa, pb = self._part[a], self._part[b]
        for left in (pa, pb):
            for right in (pa, pb):
                total[left[:, None] == right[None, :]] = _FORBIDDEN
        best = int(np.argmin(total))
        if total.flat[best] >= gain:
            return None
        i, j = divmod(best, count)
        return self._moved(index, (a[i], b[i], a[j], b[j]))

    def _effects(self, index: Index) -> Real:
        """What each step does to the residual, shape (K, steps)."""
        target = index[self._part] + self._step
        inside = (target >= 0) & (target < self.grid.counts[self._part])
        safe = np.where(inside, target, index[self._part])
        change = self.grid.logs[self._part, safe] - self.grid.logs_at(index)[self._part]
        effects = self.model.matrix[:, self._part] * change
        effects[0, ~inside] = _FORBIDDEN
        return effects

    def _moved(self, index: Index, moves: tuple[int, ...]) -> Index:
        out = index.copy()
        for move in moves:
            out[self._part[move]] += self._step[move]
        return out
