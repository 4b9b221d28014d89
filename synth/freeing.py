"""Which further parts help most when they are freed: the best choice of each few, exactly.

Beside the parts that must change, each one and each two further parts are asked for the best
they can do in the linear model about the choice so far (see `synth.choosing.completion`); sets
that cannot come near the limits are left out.  Called by `synth.repicking`.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Collection, Sequence

import numpy as np

from synth.choosing.completion import aligned, best_choices
from synth.choosing.descent import Neighbourhood
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Goal, LinearModel, compensation
from synth.circuit import Circuit
from synth.nodal import compile_circuit

__all__ = ["Freeing"]

# What one exact question may hold: some milliseconds each, for three parts of the finest series.
FRONTIER = 40_000
SUMS = 100_000

# Most sets asked about; of boards with more, only sets that hold one of the best single parts.
MOST_SETS = 120

# A set whose best error in the model is up to this times the limits may still meet them on the
# whole circuit.
NEARLY = 1.2


class Freeing:
    """Questions about the choice `circuit`, once it is known to miss the limits.

    Parameters
    ----------
    opened
        The circuit in which only some parts have a choice.
    goal
        What is to be shown.
    limit_rms
        Weighted rms error of a board at both limits at every frequency: no board that meets
        them has more.
    """

    def __init__(
        self,
        circuit: Circuit,
        opened: Callable[[Collection[str]], Circuit],
        goal: Goal,
        limit_rms: float,
    ) -> None:
        self.opened = opened
        self.values = np.array([p.value for p in circuit.passives])
        self.model = LinearModel.about(compile_circuit(circuit), self.values, goal)
        self.highest = (NEARLY * limit_rms) ** 2

    def promising(
        self, base: Sequence[str], resistors: Sequence[str], others: Sequence[str], size: int
    ) -> list[tuple[str, ...]]:
        """Sets of `size` further parts that could meet the limits beside `base`, those without
        capacitors first, the best first."""
        every = (*resistors, *others)
        sets = list(itertools.combinations(every, size))
        if len(sets) > MOST_SETS:
            best = sorted(every, key=lambda ref: self._least([*base, ref]))
            share = max(1, MOST_SETS // len(every))
            sets = [s for s in sets if set(s) & set(best[:share])]
        costs = {s: self._least([*base, *s]) for s in sets}
        near = [s for s in sets if costs[s] <= self.highest]
        return sorted(near, key=lambda s: (len(set(s) & set(others)), costs[s], s))

    def most_helpful(self, base: Sequence[str], candidates: Sequence[str]) -> str:
        """The part that lowers the error most when it is freed beside `base`, however many."""
        return min(candidates, key=lambda ref: self._descended([*base, ref]))

    def _least(self, free: Sequence[str]) -> float:
        """Mean square error of the best choice of the parts `free`, infinite where no choice
        comes near the limits."""
        grid = ValueGrid(self.opened(free).passives)
        found = best_choices(
            grid,
            aligned(self.model, grid),
            below=max(self.highest - self.model.floor, 0.0),
            largest_frontier=FRONTIER,
            largest_sums=SUMS,
        )
        if found is None:
            return self._descended(free)
        return float(found.squares[0]) + self.model.floor if found.squares.size else np.inf

    def _descended(self, free: Sequence[str]) -> float:
        """Mean square error a descent over the parts `free` reaches."""
        grid = ValueGrid(self.opened(free).passives)
        neighbourhood = Neighbourhood(grid, self.model)
        choice = grid.counts > 1
        exact = self.model.reference.copy()
        exact[choice] -= compensation(self.model.matrix[:, choice]) @ self.model.offset
        starts = (grid.nearest(self.model.reference), grid.nearest(exact))
        return min(neighbourhood.descend(start)[1] for start in starts) + self.model.floor
