"""The free quantities of a scaling, as one vector of logarithms.

v = (ln level of every block but the output, ln C of every integrator, ln R_f of every adder),
with levels in V per unit of signal, C in F, R_f in ohm.  The output's level is 1: the output
is H u.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.graph import Block, BlockGraph, Term

__all__ = ["Variables"]

Real = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Variables:
    """Where each free quantity of `graph` stands in the vector."""

    graph: BlockGraph

    @cached_property
    def _places(self) -> dict[tuple[str, str], int]:
        free = [b.name for b in self.graph.blocks if b.name != self.graph.output]
        keys = [("level", n) for n in free]
        keys += [("size", b.name) for b in self.graph.blocks]
        return {key: k for k, key in enumerate(keys)}

    @property
    def count(self) -> int:
        """Length of the vector."""
        return len(self._places)

    def level_place(self, name: str) -> int | None:
        """Index of a block's level; None for the output and the input."""
        return self._places.get(("level", name))

    def size_place(self, name: str) -> int:
        """Index of a block's C or R_f."""
        return self._places["size", name]

    def level(self, name: str, factor: float = 1.0) -> Real:
        """Exponents of level ** factor; zero for the output and the input."""
        out = np.zeros(self.count)
        place = self.level_place(name)
        if place is not None:
            out[place] = factor
        return out

    def size(self, name: str, factor: float = 1.0) -> Real:
        """Exponents of size ** factor."""
        out = np.zeros(self.count)
        out[self.size_place(name)] = factor
        return out

    def weight(self, block: Block, term: Term) -> tuple[float, Real]:
        """|weight| of a term as coefficient and exponents: |w| level_i / level_j."""
        return abs(float(term.weight)), self.level(block.name) - self.level(term.source)

    def resistance(self, block: Block, term: Term) -> tuple[float, Real]:
        """Resistance of a term: 1 / (w C) into an integrator, R_f / w into an adder."""
        coefficient, exponents = self.weight(block, term)
        sign = -1.0 if block.is_integrator else 1.0
        return 1 / coefficient, sign * self.size(block.name) - exponents

    def levels_of(self, v: Real) -> dict[str, float]:
        """Levels by block, the output left out."""
        return {n: float(np.exp(v[k])) for (kind, n), k in self._places.items() if kind == "level"}

    def sizes_of(self, v: Real) -> dict[str, float]:
        """C or R_f by block."""
        return {n: float(np.exp(v[k])) for (kind, n), k in self._places.items() if kind == "size"}
