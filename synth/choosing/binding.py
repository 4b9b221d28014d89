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

__all__ = ["Frontier", "binding_groups", "binding_order", "outside"]

Real = NDArray[np.float64]
Index = NDArray[np.intp]

# A direction counts as spanned when a column reaches it by more than this.
RANK_TOLERANCE = 1e-7

# Rows of a null space are dependent below this: far above what rounding leaves of a direction
# spanned by columns of RANK_TOLERANCE, far below what independent ones of parts have.
DEPENDENT = 1e-5


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

    def grown(
        self, part: int, open_columns: Real, *, below: float, largest: int
    ) -> Frontier | None:
        """With `part` at each of its values, as far as the bound stays below `below`.

        None when more than `largest` assignments would remain.
        """
        if self.count * int(self.grid.counts[part]) > 8 * largest:
            return None
        kept, value = np.nonzero(self._squares(part, open_columns) < below)
        if kept.size > largest:
            return None
        return self._with(part, kept, value)

    def grown_best(self, part: int, open_columns: Real, *, count: int) -> Frontier:
        """With `part` at each of its values, the `count` assignments with the lowest bounds,
        those far from the reference ranked as if their bound were larger by a tenth per unit
        of ln."""
        parts = np.array(self.parts, dtype=np.intp)
        logs = self.grid.logs[parts[:, None], self.chosen]
        before = np.sum((logs - self.model.reference[parts][:, None]) ** 2, axis=0)
        distance = np.sqrt(np.add.outer(before, self._changes(part) ** 2))
        rank = np.sqrt(self._squares(part, open_columns)) * (1 + 0.1 * distance)
        kept, value = np.unravel_index(_lowest(rank.ravel(), count), rank.shape)
        return self._with(part, kept, value)

    def _changes(self, part: int) -> Real:
        """Each value of `part` against the reference, in ln."""
        changes: Real = self.grid.logs[part, : self.grid.counts[part]] - self.model.reference[part]
        return changes

    def _squares(self, part: int, open_columns: Real) -> Real:
        """Bounds with `part` at each of its values, shape (N, values): what lies across the
        part's own direction, and what its value leaves along it."""
        away = outside(open_columns)
        before, along = away @ self.residuals, away @ self.model.matrix[:, part]
        length = float(along @ along)
        if length <= RANK_TOLERANCE**2:
            along, length = np.zeros_like(along), 1.0
        wanted = -(along @ before) / length
        across = np.sum((before + np.outer(along, wanted)) ** 2, axis=0)
        miss = np.subtract.outer(wanted, self._changes(part))
        return np.asarray(across[:, None] + float(along @ along) * miss**2)

    def _with(self, part: int, kept: Index, value: Index) -> Frontier:
        """The assignments `kept` with `part` at its values `value`."""
        column = self.model.matrix[:, part]
        return replace(
            self,
            parts=(*self.parts, part),
            chosen=np.concatenate([self.chosen[:, kept], value[None, :]]),
            residuals=self.residuals[:, kept] + np.outer(column, self._changes(part)[value]),
        )


def binding_groups(matrix: Real, grid: ValueGrid) -> list[tuple[int, ...]]:
    """The sets of one, two and three parts that bind, smaller ones first: the columns of all
    others span less than the whole, and no smaller set within has this property.

    A set binds when some change of the response needs a part of it: some row of the matrix
    vanishes outside the set.  Rows are what is orthogonal to the null space, so the null
    space, restricted to the set, has dependent rows.
    """
    free = np.flatnonzero(grid.counts > 1)
    null = outside(matrix[:, free].T).T
    gram = null @ null.T
    found: list[tuple[int, ...]] = []
    for size in (1, 2, 3):
        groups = np.array(list(itertools.combinations(range(free.size), size)), dtype=np.intp)
        if groups.size == 0:
            break
        smallest = np.linalg.eigvalsh(gram[groups[:, :, None], groups[:, None, :]])[:, 0]
        for group in groups[smallest < DEPENDENT**2]:
            parts = tuple(int(free[k]) for k in group)
            if not any(set(g) <= set(parts) for g in found):
                found.append(parts)
    return found


def binding_order(matrix: Real, grid: ValueGrid) -> tuple[list[int], int]:
    """All parts with a choice, in the order in which they bind, and how many of them bind; the
    others follow by falling influence."""
    order: list[int] = []
    for group in binding_groups(matrix, grid):
        new = [k for k in group if k not in order]
        if len(new) >= min(len(group), 2):
            order += new
    binding = len(order)
    rest = [int(k) for k in np.flatnonzero(grid.counts > 1) if k not in order]
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


def _lowest(rank: Real, count: int) -> Index:
    """Where the `count` lowest numbers are, ascending."""
    if rank.size <= count:
        return np.argsort(rank, kind="stable")
    lowest = np.sort(np.argpartition(rank, count)[:count])
    return np.asarray(lowest[np.argsort(rank[lowest], kind="stable")], dtype=np.intp)
