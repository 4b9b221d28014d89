"""A cascade of two-integrator loops with a lossy integrator (Tow 1968, Thomas 1971, from memory).

Both integrators of a section have the rate w next to w0, as circuits with equal R and C have;
the exact product w k = a0 stands in the loop::

    x1' = -a1 y - k x2 + b1 u      the lossy integrator, with the damping
    x2' =  w y - (b0 / k) u
    y   =  x1 + b2 u               x1 itself where b2 = 0

Each coefficient of the numerator is one path from the input u, so zeros at the origin come
from the structure: a band-pass is the output of the lossy integrator, fed alone.  The damping is
taken from y, since taken from x1 it would leave b1 - a1 b2 to be formed by a difference.  A
low-pass is taken from x2, the input feeding x1 alone.  The loop's inverter, or an adder that
inverts, follows from the signs.  In circuits with ideal parts R_i and C_i, a gain r of the
inverter gives w0^2 = r / (R_a R_b C_a C_b) (from memory).
"""

from __future__ import annotations

from synth.forms.sectionwise import Biquad, in_cascade
from synth.graph import Block, BlockGraph
from synth.transfer import TransferFunction

__all__ = ["tow_thomas"]


def tow_thomas(target: TransferFunction) -> BlockGraph:
    """The cascade of Tow-Thomas sections of a proper H(s), weights exact as far as the factors
    are."""
    return in_cascade("tow_thomas", target, _section)


def _section(of: Biquad) -> tuple[list[Block], str]:
    (b0, b1, b2), (a0, a1) = of.b, of.a
    x1, x2, w = of.first, of.second, of.rate
    if b1 == 0 and b2 == 0:
        lossy = of.term(of.source, b0 / w, f"gain, input into {x1}")
        lossy += of.term(x1, -a1, f"damping of {x1}")
        lossy += of.term(x2, -a0 / w, f"frequency, {x2} into {x1}")
        other = of.term(x1, w, f"frequency, {x1} into {x2}")
        return [Block(x1, "integrator", tuple(lossy)), Block(x2, "integrator", tuple(other))], x2
    y = f"y{of.number}" if b2 else x1
    k = a0 / w if a0 else w
    lossy = of.term(of.source, b1, f"b1, input into {x1}")
    lossy += of.term(y, -a1, f"damping, {y} into {x1}")
    other = of.term(y, a0 / k, f"frequency, {y} into {x2}")
    other += of.term(of.source, -b0 / k, f"b0, input into {x2}")
    if other:
        lossy += of.term(x2, -k, f"frequency, {x2} into {x1}")
    blocks = [Block(x1, "integrator", tuple(lossy))] if lossy else []
    blocks += [Block(x2, "integrator", tuple(other))] if other else []
    if b2:
        total = of.term(x1, b2 / b2, f"{x1} to the output") if lossy else []
        total += of.term(of.source, b2, "b2, input to the output")
        blocks.append(Block(y, "adder", tuple(total)))
    return blocks, y
