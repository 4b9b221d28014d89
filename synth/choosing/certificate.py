"""How good any choice of values could be: branch and bound over the series.

The question is put to the linear model with the op-amps' error as it is at the chosen values:
mean square = |A d + r|^2 + floor, A from ideal op-amps, so that only what the parts really
set counts.  Of a small circuit the best choices of all are found exactly (see
`synth.choosing.completion`).  Of a larger one partial assignments are grown part by part,
those first that bind; one whose lower bound (see `synth.choosing.binding`) is above the
incumbent is dropped.  They are kept breadth first, so the smallest bound among them is a
lower bound for every choice there is.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.choosing.binding import Frontier, binding_order
from synth.choosing.bottlenecks import Bottleneck, bottlenecks
from synth.choosing.completion import LARGEST_FRONTIER, aligned, best_choices
from synth.choosing.grid import ValueGrid
from synth.choosing.model import LevelLimits, LinearModel
from synth.choosing.supply import Supply

__all__ = ["Certificate", "certify"]

Index = NDArray[np.intp]

# An incumbent within this ratio of the bound is proven for every practical purpose.
PROVEN_RATIO = 1e-3


@dataclass(frozen=True, kw_only=True)
class Certificate:
    """What is known of the best choice.

    Parameters
    ----------
    rms
        Of the incumbent in the model, a plain ratio.
    lower_bound
        No choice from the series has a smaller rms.
    proven
        Whether the incumbent is the best there is, exactly or within `PROVEN_RATIO`.
    exhausted
        Whether every choice was either excluded by a bound or looked at.
    assigned
        The parts that were assigned, in the order they bind.
    bottlenecks
        Sets of parts whose values on offer alone leave an error, the largest first.
    better
        The choices better than the incumbent, where every one was looked at, the best first:
        index vectors, shape (N, P); None where there is none, or none is known.
    looked
        How many assignments and completions the exact search evaluated.
    held
        Parts whose values were no choice: fixed by the job, or kept from an earlier design.
    unshared
        What was known of the choice before values were shared, where they were; the lower bound
        is that of this one.
    """

    rms: float
    lower_bound: float
    proven: bool
    exhausted: bool
    assigned: tuple[str, ...]
    bottlenecks: tuple[Bottleneck, ...] = ()
    better: Index | None = None
    looked: int = 0
    held: tuple[str, ...] = ()
    unshared: Certificate | None = None

    @property
    def gap(self) -> float:
        """How far the incumbent may be above the best, a ratio of the incumbent."""
        return 1 - self.lower_bound / self.rms if self.rms else 0.0


def certify(
    grid: ValueGrid,
    model: LinearModel,
    incumbent: Index,
    *,
    limits: LevelLimits | None = None,
    supply: Supply | None = None,
    largest_frontier: int = LARGEST_FRONTIER,
) -> Certificate:
    """Bound what any choice of values from `grid` can reach.

    Parameters
    ----------
    model
        Linear model whose matrix has ideal op-amps.
    incumbent
        The choice to be judged, shape (P,).
    limits, supply
        What a choice must keep.
    largest_frontier
        How many partial assignments are held at most; more give a tighter bound.
    """
    model = aligned(model, grid)
    square = model.mean_square(grid.logs_at(incumbent)) - model.floor
    below = square * (1 - 1e-9)
    exact = best_choices(
        grid,
        model,
        below=below,
        limits=limits,
        supply=supply,
        largest_frontier=largest_frontier,
    )
    if exact is None:
        frontier = _grown(grid, model, below, largest_frontier)
        bound, better, looked = _least(frontier, grid, model, square), None, 0
        assigned = frontier.parts
    else:
        bound = float(exact.squares[0]) if exact.squares.size else square
        better = exact.index if exact.squares.size else None
        looked, assigned = exact.looked, tuple(int(k) for k in np.flatnonzero(grid.counts > 1))
    rms, lower = float(np.sqrt(square + model.floor)), float(np.sqrt(bound + model.floor))
    sets = bottlenecks(grid, model)
    if exact is None and sets:
        lower = min(rms, max(lower, *(b.rms for b in sets)))
    return Certificate(
        rms=rms,
        lower_bound=lower,
        proven=lower >= rms * (1 - PROVEN_RATIO),
        exhausted=exact is not None,
        assigned=tuple(grid.parts[k].ref for k in assigned),
        bottlenecks=sets,
        better=better,
        looked=looked,
        held=tuple(p.ref for p in grid.parts if p.fixed and p.on_board),
    )


def _grown(grid: ValueGrid, model: LinearModel, below: float, largest: int) -> Frontier:
    """Partial assignments of as many parts as can be held."""
    order, _ = binding_order(model.matrix, grid)
    frontier = Frontier.start(model, grid)
    for place, part in enumerate(order):
        columns = model.matrix[:, order[place + 1 :]]
        grown = frontier.grown(part, columns, below=below, largest=largest)
        if grown is None:
            break
        frontier = grown
        if frontier.count == 0:
            break
    return frontier


def _least(frontier: Frontier, grid: ValueGrid, model: LinearModel, square: float) -> float:
    """The smallest bound among partial assignments, at most that of the incumbent."""
    if frontier.count == 0:
        return square
    order, _ = binding_order(model.matrix, grid)
    bounds = frontier.bounds(model.matrix[:, order[len(frontier.parts) :]])
    return min(square, float(np.min(bounds)))
