"""A cascade of state-variable sections (Kerwin, Huelsman and Newcomb 1967, from memory).

A summer whose output is the high-pass, and two integrators of the rate w next to w0 behind it,
with the exact product w k = a0::

    h   = g u - (a1 / w) x1 - x2      the summer
    x1' = w h,   x2' = k x1           band-pass and low-pass
    y   = b2 h + (b1 / w) x1 + (b0 / a0) x2

A numerator of one term needs no output adder: it is one of the three outputs, with its gain in
g; otherwise g = 1.  All zeros at the origin come from the structure.  The summer takes terms of
either sign: with one op-amp it feeds both of its inputs, as the classical circuit does.
"""

from __future__ import annotations

from synth.forms.sectionwise import Biquad, in_cascade
from synth.graph import Block, BlockGraph
from synth.transfer import TransferFunction

__all__ = ["khn"]


def khn(target: TransferFunction) -> BlockGraph:
    """The cascade of Kerwin-Huelsman-Newcomb sections of a proper H(s), weights exact as far as
    the factors are."""
    return in_cascade("khn", target, _section)


def _section(of: Biquad) -> tuple[list[Block], str]:
    a0, a1 = of.a
    h, x1, x2, w = f"h{of.number}", of.first, of.second, of.rate
    k = a0 / w if a0 else w
    # Each output's gain for its power of s: x2 = w k h / s^2, x1 = w h / s.
    taps = [(x2, of.b[0] / (w * k), 0), (x1, of.b[1] / w, 1), (h, of.b[2], 2)]
    taps = [tap for tap in reversed(taps) if tap[1]]
    gain = taps[0][1] if len(taps) == 1 else w / w
    summer = of.term(of.source, gain, f"gain, input into {h}")
    summer += of.term(x1, -a1 / w, f"damping, {x1} into {h}")
    summer += of.term(x2, -a0 / (w * k), f"frequency, {x2} into {h}")
    blocks = [
        Block(h, "adder", tuple(summer), both_signs=True),
        Block(x1, "integrator", tuple(of.term(h, w, f"frequency, {h} into {x1}"))),
    ]
    if a0 or of.b[0]:
        blocks.append(Block(x2, "integrator", tuple(of.term(x1, k, f"frequency, {x1} into {x2}"))))
    if len(taps) == 1:
        return blocks, taps[0][0]
    y = f"y{of.number}"
    total = [t for name, c, power in taps for t in of.term(name, c, f"b{power}, {name} to {y}")]
    return [*blocks, Block(y, "adder", tuple(total), both_signs=True)], y
