"""The observable canonical form: a chain of integrators, input and output fed into each.

With H(s) = (b_n s^n + ... + b_0) / (s^n + a_{n-1} s^{n-1} + ... + a_0)::

    y    = x_n + b_n u
    x_1' = b_0 u - a_0 y,   x_{k+1}' = x_k + b_k u - a_k y

The coefficients stand as they are: no differences, and zeros at the origin come from the
structure.  A strictly proper H(s) has x_n itself as the output.
"""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction

from synth.forms.common import ascending
from synth.graph import INPUT, Block, BlockGraph, Term
from synth.transfer import TransferFunction

__all__ = ["observable", "observable_section"]


def observable(target: TransferFunction) -> BlockGraph:
    """The observable canonical form of a proper H(s), weights exact."""
    b, a = ascending(target)
    blocks, output = observable_section(b, a, source=INPUT, first=1, adder="y")
    return BlockGraph("observable", blocks, output)


def observable_section(
    b: list[Fraction],
    a: list[Fraction],
    *,
    source: str,
    first: int,
    adder: str,
    label: Callable[[str], str] = lambda text: text,
) -> tuple[tuple[Block, ...], str]:
    """Blocks of one observable chain and the name of its output.

    Parameters
    ----------
    b, a
        Ascending coefficients, length n + 1, a[n] = 1.
    source
        What the chain reads as its input.
    first
        Number of its first integrator: names are x{first}, x{first+1}, ...
    adder
        Name of the output adder, used when b[n] is not zero.
    label
        Turns "a0, ..." into the words of the parts list.
    """
    n = len(a) - 1
    names = [f"x{first + k}" for k in range(n)]
    biproper = b[n] != 0
    output = adder if biproper else names[-1]
    blocks: list[Block] = []
    for k, name in enumerate(names):
        terms: list[Term] = []
        if k:
            terms.append(Term(names[k - 1], a[n], label(f"{names[k - 1]} into {name}")))
        if b[k]:
            terms.append(Term(source, b[k], label(f"b{k}, input into {name}")))
        if a[k]:
            terms.append(Term(output, -a[k], label(f"a{k}, feedback into {name}")))
        blocks.append(Block(name, "integrator", tuple(terms)))
    if biproper:
        terms = [
            Term(names[-1], a[n], label(f"{names[-1]} to output")),
            Term(source, b[n], label(f"b{n}, input to output")),
        ]
        blocks.append(Block(adder, "adder", tuple(terms)))
    return tuple(blocks), output
