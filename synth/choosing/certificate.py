"""How good any choice of values could be: branch and bound over the series.

The question is put to the linear model with the op-amps' error as it is at the chosen values:
mean square = |A d + r|^2 + floor, A from ideal op-amps, so that only what the parts really
set counts.  Partial assignments are grown part by part, those first that bind; one whose
lower bound (see `synth.choosing.binding`) is above the incumbent is dropped.  They are kept
breadth first, so the smallest bound among them is a lower bound for every choice there is;
when none is left, or every part is assigned, the best choice is proven.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.choosing.binding import Frontier, binding_order
from synth.choosing.bottlenecks import Bottleneck, bottlenecks
from synth.choosing.grid import ValueGrid
from synth.choosing.model import LinearModel

__all__ = ["Certificate", "certify"]

Index = NDArray[np.intp]

# An incumbent within this ratio of the bound is proven for every practical purpose.
PROVEN_RATIO = 1e-3

# Largest number of partial assignments held at once.
LARGEST_FRONTIER = 400_000


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
        Whether every choice was either dropped for its bound or looked at.
    assigned
        The parts that were assigned, in the order they bind.
    bottlenecks
        Sets of parts whose values on offer alone leave an error, the largest first.
    better
        A choice better than the incumbent, where every one was looked at: an index vector.
    held
        Parts whose values were no choice: fixed by the job, or kept from an earlier design.
    """

    rms: float
    lower_bound: float
    proven: bool
    exhausted: bool
    assigned: tuple[str, ...]
    bottlenecks: tuple[Bottleneck, ...] = ()
    better: Index | None = None
    held: tuple[str, ...] = ()

    @property
    def gap(self) -> float:
        """How far the incumbent may be above the best, a ratio of the incumbent."""
        return 1 - self.lower_bound / self.rms if self.rms else 0.0


def certify(
    grid: ValueGrid,
    model: LinearModel,
    incumbent: Index,
    *,
    largest_frontier: int = LARGEST_FRONTIER,
) -> Certificate:
    """Bound what any choice of values from `grid` can reach.

    Parameters
    ----------
    model
        Linear model whose matrix has ideal op-amps.
    incumbent
        The choice to be judged, shape (P,).
    largest_frontier
        How many partial assignments are held at most; more give a tighter bound.
    """
    square = model.mean_square(grid.logs_at(incumbent)) - model.floor
    order, _ = binding_order(model.matrix, grid)
    frontier = Frontier.start(model, grid)
    for place, part in enumerate(order):
        columns = model.matrix[:, order[place + 1 :]]
        below = square * (1 - 1e-12)
        grown = frontier.grown(part, columns, below=below, largest=largest_frontier)
        if grown is None:
            break
        frontier = grown
        if frontier.count == 0:
            break
    complete = len(frontier.parts) == len(order)
    bound, better = square, None
    if frontier.count:
        bounds = frontier.bounds(model.matrix[:, order[len(frontier.parts) :]])
        best = int(np.argmin(bounds))
        bound = min(square, float(bounds[best]))
        if complete:
            better = incumbent.copy()
            better[list(frontier.parts)] = frontier.chosen[:, best]
            if np.array_equal(better, incumbent):  # Itself, kept by a rounding of its bound.
                better = None
    rms, lower = float(np.sqrt(square + model.floor)), float(np.sqrt(bound + model.floor))
    sets = bottlenecks(grid, model)
    lower = min(rms, max(lower, *(b.rms for b in sets)) if sets else lower)
    exhausted = complete or frontier.count == 0
    return Certificate(
        rms=rms,
        lower_bound=lower,
        proven=better is None and (exhausted or lower >= rms * (1 - PROVEN_RATIO)),
        exhausted=exhausted,
        assigned=tuple(grid.parts[k].ref for k in frontier.parts),
        bottlenecks=sets,
        better=better,
        held=tuple(p.ref for p in grid.parts if p.fixed and p.on_board),
    )
