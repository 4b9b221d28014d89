"""Cells that use both inputs of their op-amp: their noise gain, and room at the other input.

With gains n_j at the inverting and p_k at the non-inverting input the noise gain is the larger of
1 + sum n and sum p (`synth.cells.difference`); a cell where it is the latter is called crowded.
The scaling keeps to where none is, with something to spare, so that the resistor that balances
the two inputs stands at the non-inverting one and is of a usual size.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.graph import Block, Term
from synth.polarity import Polarity
from synth.scaling.signomial import Signomial
from synth.scaling.variables import Variables

__all__ = ["NoiseGains", "crowded_blocks", "rooms_at_both_inputs"]

Real = NDArray[np.float64]
Smooth = Callable[[Real], tuple[float, Real]]

# Largest sum of the gains at the non-inverting input, as a share of 1 + those at the other.
FULLEST = 0.95


@dataclass(frozen=True, kw_only=True)
class NoiseGains:
    """Which gains of each block make up its noise gain, for given signs."""

    polarity: Polarity
    crowded: frozenset[str] = frozenset()

    def uses_both_inputs(self, block: Block) -> bool:
        """Whether some of its terms go to the non-inverting input."""
        return bool(self._at_plus(block))

    def of(self, block: Block) -> tuple[float, tuple[Term, ...]]:
        """A constant, 1 or 0, and the terms whose gains (weights over s, of an integrator) are
        added to it."""
        at_plus = self._at_plus(block)
        if block.name in self.crowded and at_plus:
            return 0.0, at_plus
        return 1.0, tuple(t for t in block.terms if t not in at_plus)

    def _at_plus(self, block: Block) -> tuple[Term, ...]:
        return tuple(
            t for t in block.terms if self.polarity.at_plus(block.name, t.source, float(t.weight))
        )


def rooms_at_both_inputs(
    variables: Variables, polarity: Polarity, smallest: float
) -> tuple[Smooth, ...]:
    """Functions of the vector of `variables`, with gradients, that are to be positive.

    For each cell that uses both inputs: the sum of the gains at the non-inverting one is at most
    its `FULLEST`, and the resistor that balances the two, at least R_f / (1 + sum n), is not below
    `smallest` [ohm].
    """
    rooms: list[Smooth] = []
    for name, (minus, plus) in _sums(variables, polarity).items():
        full = Signomial.of_terms([(FULLEST, np.zeros(variables.count))], variables.count)
        least = Signomial.of_terms([(1 / smallest, variables.size(name))], variables.count)
        rooms += [_LogRatio((minus, full), (plus,)), _LogRatio((least,), (minus,))]
    return tuple(rooms)


@dataclass(frozen=True, eq=False)
class _LogRatio:
    """ln of a product of sums over another, with its gradient."""

    above: tuple[Signomial, ...]
    below: tuple[Signomial, ...]

    def __call__(self, v: Real) -> tuple[float, Real]:
        total, slope = 0.0, np.zeros(v.size)
        for sign, factors in ((1, self.above), (-1, self.below)):
            for factor in factors:
                value, gradient = factor(v)
                total += sign * float(np.log(value))
                slope = slope + sign * gradient / value
        return total, slope


def crowded_blocks(variables: Variables, polarity: Polarity, v: Real) -> frozenset[str]:
    """The blocks whose noise gain is the sum of the gains at their non-inverting input."""
    found = _sums(variables, polarity).items()
    return frozenset(name for name, (minus, plus) in found if plus(v)[0] > minus(v)[0])


def _sums(variables: Variables, polarity: Polarity) -> dict[str, tuple[Signomial, Signomial]]:
    """1 + sum n and sum p by block."""
    gains = NoiseGains(polarity=polarity)
    out: dict[str, tuple[Signomial, Signomial]] = {}
    for block in variables.graph.blocks:
        if gains.uses_both_inputs(block):
            _, minus = gains.of(block)
            plus = [t for t in block.terms if t not in minus]
            one = (1.0, np.zeros(variables.count))
            out[block.name] = (
                Signomial.of_terms(
                    [one, *(variables.weight(block, t) for t in minus)], variables.count
                ),
                Signomial.of_terms([variables.weight(block, t) for t in plus], variables.count),
            )
    return out
