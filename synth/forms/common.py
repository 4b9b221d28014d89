"""What the forms share: coefficients with their powers, and taking the output."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

from synth.graph import Block, BlockGraph, Term, merged_terms
from synth.transfer import TransferFunction

__all__ = ["ascending", "with_output"]


def ascending(target: TransferFunction) -> tuple[list[Fraction], list[Fraction]]:
    """b_0 ... b_n and a_0 ... a_n = 1 of a proper H(s), both of length n + 1."""
    a = list(reversed(target.denominator))
    b = list(reversed(target.numerator))
    return b + [Fraction(0)] * (len(a) - len(b)), a


def with_output(form: str, blocks: Sequence[Block], terms: Sequence[Term], name: str) -> BlockGraph:
    """The graph whose output is the weighted sum `terms`.

    A single term from a block needs no adder: the block itself becomes the output, its level
    multiplied by the weight.  Otherwise an adder called `name` is appended.
    """
    summed = merged_terms(terms)
    if len(summed) == 1 and any(b.name == summed[0].source for b in blocks):
        (term,) = summed
        graph = BlockGraph(form, tuple(blocks), term.source)
        return graph.rescaled({term.source: term.weight})
    return BlockGraph(form, (*blocks, Block(name, "adder", summed)), name)
