"""The controllable canonical form: a chain of integrators fed at its head.

With H(s) = (b_n s^n + ... + b_0) / (s^n + a_{n-1} s^{n-1} + ... + a_0)::

    e    = u - a_{n-1} x_n - ... - a_0 x_1
    x_n' = e,   x_k' = x_{k+1}
    y    = b_n e + b_{n-1} x_n + ... + b_0 x_1

A strictly proper H(s) needs no adder for e, since x_n sums for itself.  With b_n the output
is taken from e, never as b_n u + sum (b_k - a_k b_n) x_{k+1}, so that the coefficients of
the numerator stand in the circuit as they are and zeros at the origin come from the
structure.  Last row of A: -a_0 ... -a_{n-1} (common practice).
"""

from __future__ import annotations

from synth.forms.common import ascending, with_output
from synth.graph import INPUT, Block, BlockGraph, Term
from synth.transfer import TransferFunction

__all__ = ["controllable"]


def controllable(target: TransferFunction) -> BlockGraph:
    """The controllable canonical form of a proper H(s), weights exact."""
    b, a = ascending(target)
    n = target.order
    head = [Term(INPUT, a[n], "input gain")]
    head += [
        Term(f"x{k + 1}", -a[k], f"a{k}, feedback of x{k + 1}") for k in reversed(range(n)) if a[k]
    ]
    blocks: list[Block] = []
    top = INPUT
    if b[n] and len(head) > 1:
        blocks.append(Block("e", "adder", tuple(head)))
        top = "e"
        head = [Term("e", a[n], f"e into x{n}")]
    blocks.append(Block(f"x{n}", "integrator", tuple(head)))
    blocks += [
        Block(f"x{k}", "integrator", (Term(f"x{k + 1}", a[n], f"x{k + 1} into x{k}"),))
        for k in reversed(range(1, n))
    ]
    output = [Term(top, b[n], f"b{n}, {'input' if top == INPUT else 'e'} to output")]
    output += [Term(f"x{k + 1}", b[k], f"b{k}, x{k + 1} to output") for k in reversed(range(n))]
    return with_output("controllable", blocks, [t for t in output if t.weight], "y")
