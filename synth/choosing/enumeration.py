"""Every choice there is, where they are few: the best by the nodal engine, no model between."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from synth.choosing.grid import ValueGrid
from synth.choosing.model import Ceilings, Goal
from synth.choosing.search import SearchOutcome
from synth.nodal import NodalProgram

__all__ = ["LARGEST_ENUMERATION", "best_of_all"]

Real = NDArray[np.float64]

# Up to this many choices are all solved: well below a second, and any two parts of a coarse
# series or one of the finest.
LARGEST_ENUMERATION = 4096


def best_of_all(
    program: NodalProgram,
    grid: ValueGrid,
    goal: Goal,
    ceilings: Ceilings | None = None,
    *,
    largest: int = LARGEST_ENUMERATION,
) -> SearchOutcome | None:
    """The choice with the least error of all, or None where there are more than `largest`.

    Choices that raise an op-amp output beyond `ceilings` count only when every one does.
    """
    counts = [int(n) for n in grid.counts]
    total = math.prod(counts)
    if total > largest:
        return None
    places = np.stack(np.unravel_index(np.arange(total), counts), axis=1)
    values = np.array([grid.values_at(place) for place in places])
    squares = goal.mean_squares(program, values)
    if ceilings is not None:
        held = ceilings.keep(program, values)
        if np.any(held):
            squares = np.where(held, squares, np.inf)
    best = int(np.argmin(squares))
    return SearchOutcome(index=places[best], rms=float(np.sqrt(squares[best])), looked=total)
