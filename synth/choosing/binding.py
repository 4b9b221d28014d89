"""Which parts bind: partial assignments and what they leave undone.

A coefficient that hangs on few parts alone, such as a damping on one product R C, is bounded
as soon as these parts have values, whatever all others do.  Letting every open part take
any value at all, what remains of the residual is its part outside the span of the open
parts' columns: a lower bound for every completion.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.choosing.grid import ValueGrid
from synth.choosing.model import LinearModel

__all__ = ["Frontier", "binding_order", "outside"]

Real = NDArray[np.float64]
Index = NDArray[np.intp]

# A direction counts as spanned when a column reaches it by more than this.
RANK_TOLERANCE = 1e-7


@dataclass(frozen=True, eq=False)
class Frontier:
    """Partial assignments of the same parts.

    Attributes
    ----------
    model, grid
        The linear model, its matrix with ideal op-amps, and the values on offer.
    parts
        The parts assigned, in order.
    chosen
        Their indices into the grid, shape (len(parts), N).
    residuals
        Residual of the assigned parts, every other one at its reference, shape (K, N).
    """

    model: LinearModel
    grid: ValueGrid
    parts: tuple[int, ...]
    chosen: Index
    residuals: Real

    @classmethod
    def start(cls, model: LinearModel, grid: ValueGrid) -> Frontier:
        """Nothing assigned but what has no choice."""
        fixed = np.flatnonzero(grid.counts == 1)
        change = grid.logs[fixed, 0] - model.reference[fixed]
        residual = model.offset + model.matrix[:, fixed] @ change
        return cls(model, grid, (), np.empty((0, 1), dtype=np.intp), residual[:, None])

    @property
    def count(self) -> int:
        """How many assignments."""
        return int(self.residuals.shape[1])

    def bounds(self, open_columns: Real) -> Real:
        """Lower bounds of the mean square with the columns of the open parts, shape (N,)."""
        return np.asarray(np.sum((outside(open_columns) @ self.residuals) ** 2, axis=0))

    def best(self, open_columns: Real, count: int) -> Frontier:
        """The `count` assignments with the lowest bounds, those far from the reference ranked as
        if their bound were larger by a tenth per unit of ln."""
        bounds = np.sqrt(self.bounds(open_columns))
        parts = np.array(self.parts)
        logs = self.grid.logs[parts[:, None], self.chosen]
        logs = logs - self.model.reference[parts][:, None]
        distance = np.sqrt(np.sum(logs**2, axis=0))
        order = np.argsort(bounds * (1 + 0.1 * distance), kind="stable")[:count]
        return replace(self, chosen=self.chosen[:, order], residuals=self.residuals[:, order])

    def grown(
        self, part: int, open_columns: Real, *, below: float, largest: int
    ) -> Frontier | None:
        """With `part` at each of its values, as far as the bound stays below `below`.

        None when more than `largest` assignments would remain.
        """
        grid, model = self.grid, self.model
        changes = grid.logs[part, : grid.counts[part]] - model.reference[part]
        if self.count * changes.size > 8 * largest:
            return None
        away = outside(open_columns)
        column = model.matrix[:, part]
        before = away @ self.residuals
        steps = np.outer(away @ column, changes)
        squares = np.sum((before[:, :, None] + steps[:, None, :]) ** 2, axis=0)
        kept, value = np.nonzero(squares < below)
        if kept.size > largest:
            return None
        return replace(
            self,
            parts=(*self.parts, part),
            chosen=np.concatenate([self.chosen[:, kept], value[None, :]]),
            residuals=self.residuals[:, kept] + np.outer(column, changes[value]),
        )


def binding_order(matrix: Real, grid: ValueGrid) -> tuple[list[int], int]:
    """All parts with a choice, in the order in which they bind, and how many of them bind.

    A set of parts binds when the columns of all others span less than the whole; sets of one,
    two and three parts are found by trying all.  The others follow by falling influence.
    """
    free = [int(k) for k in np.flatnonzero(grid.counts > 1)]
    rank = _rank(matrix[:, free])
    order: list[int] = []
    for size in (1, 2, 3):
        for group in itertools.combinations(free, size):
            new = [k for k in group if k not in order]
            if len(new) < min(size, 2):
                continue
            if _rank(matrix[:, [k for k in free if k not in group]]) < rank:
                order += new
    binding = len(order)
    rest = [k for k in free if k not in order]
    order += sorted(rest, key=lambda k: -float(np.linalg.norm(matrix[:, k])))
    return order, binding


def outside(columns: Real) -> Real:
    """Orthonormal rows that span what `columns` do not, shape (K - rank, K)."""
    size = columns.shape[0]
    if columns.shape[1] == 0:
        return np.eye(size)
    left, singular, _ = np.linalg.svd(columns, full_matrices=True)
    rank = int(np.sum(singular > RANK_TOLERANCE))
    return np.asarray(left[:, rank:].T)


def _rank(columns: Real) -> int:
    if columns.shape[1] == 0:
        return 0
    return int(np.linalg.matrix_rank(columns, tol=RANK_TOLERANCE))
