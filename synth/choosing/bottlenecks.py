"""Parts that bind, and what their values on offer leave undone whatever all others do.

Where a coefficient hangs on two or three parts alone, such as a damping on one product R C,
the error that remains once every other part may take any value at all is a bound for every
choice, and it names its cause.  As in `synth.choosing.certificate` the question is put to the
linear model about the chosen values.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.choosing.binding import binding_groups, outside
from synth.choosing.grid import ValueGrid
from synth.choosing.model import LinearModel

__all__ = ["Bottleneck", "bottlenecks"]

Real = NDArray[np.float64]

# Most sums of two parts that are held to be completed by a third.
LARGEST_TABLE = 500_000


@dataclass(frozen=True, kw_only=True)
class Bottleneck:
    """A set of parts that binds.

    Parameters
    ----------
    refs
        The parts.
    rms
        No choice of values has a smaller rms error, for these parts' sake alone; a plain ratio.
    """

    refs: tuple[str, ...]
    rms: float


def bottlenecks(grid: ValueGrid, model: LinearModel) -> tuple[Bottleneck, ...]:
    """The sets of up to three parts that bind, those first that leave the most undone.

    `model` has ideal op-amps in its matrix.
    """
    found = []
    for group in binding_groups(model.matrix, grid):
        square = _least_square(group, grid, model)
        if square is not None:
            refs = tuple(grid.parts[k].ref for k in group)
            found.append(Bottleneck(refs=refs, rms=float(np.sqrt(square + model.floor))))
    return tuple(sorted(found, key=lambda b: (-b.rms, len(b.refs))))


def _least_square(group: tuple[int, ...], grid: ValueGrid, model: LinearModel) -> float | None:
    """What remains at best of |residual|^2; None where the group leaves more than one
    direction undone or has too many values to be tried."""
    free = [int(k) for k in np.flatnonzero(grid.counts > 1)]
    away = outside(model.matrix[:, [k for k in free if k not in group]])
    if len(away) > 1:
        # Directions no part reaches at all are no doing of the group.
        away = _reached(away, model.matrix[:, list(group)])
    if len(away) != 1 or np.prod(grid.counts[list(group[:-1])], dtype=float) > LARGEST_TABLE:
        return None
    fixed = np.flatnonzero(grid.counts == 1)
    start = model.offset + model.matrix[:, fixed] @ (grid.logs[fixed, 0] - model.reference[fixed])
    sums = np.array([float(away[0] @ start)])
    for k in group[:-1]:
        sums = np.add.outer(sums, _effects(k, away[0], grid, model)).ravel()
    last = np.sort(_effects(group[-1], away[0], grid, model))
    place = np.searchsorted(last, -sums)
    below, above = last[np.maximum(place - 1, 0)], last[np.minimum(place, last.size - 1)]
    return float(np.min(np.minimum(np.abs(sums + below), np.abs(sums + above)))) ** 2


def _effects(part: int, direction: Real, grid: ValueGrid, model: LinearModel) -> Real:
    """What each value of a part does along a direction of the residual."""
    changes = grid.logs[part, : grid.counts[part]] - model.reference[part]
    return np.asarray(float(direction @ model.matrix[:, part]) * changes)


def _reached(away: Real, columns: Real) -> Real:
    """The directions within the rows of `away` that `columns` reach."""
    left, singular, _ = np.linalg.svd(away @ columns, full_matrices=False)
    return np.asarray(left[:, singular > 1e-6 * max(float(singular[0]), 1e-30)].T @ away)
