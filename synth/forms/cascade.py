"""A cascade of first- and second-order sections.

Which zeros stand beside which poles, and in what order, is the best choice there is:
`synth.forms.chains` says by what measure.  Each section is a short observable chain, so its
zeros at the origin come from the structure.  The gain of H(s) stands in the first section;
scaling spreads it afterwards.
"""

from __future__ import annotations

from fractions import Fraction

from synth import polynomials
from synth.forms.chains import Section
from synth.forms.observable import observable_section
from synth.forms.pairing import sections
from synth.graph import INPUT, Block, BlockGraph
from synth.transfer import TransferFunction

__all__ = ["Section", "cascade", "sections"]


def cascade(target: TransferFunction) -> BlockGraph:
    """The cascade form of a proper H(s), weights exact as far as the factors are."""
    blocks: list[Block] = []
    source, first = INPUT, 1
    gain = target.gain
    for number, section in enumerate(sections(target), start=1):
        numerator = polynomials.product([(gain,), *(z.coefficients for z in section.zeros)])
        denominator = polynomials.product(p.coefficients for p in section.poles)
        a = list(reversed(denominator))
        b = list(reversed(numerator))
        b += [Fraction(0)] * (len(a) - len(b))
        chain, source = observable_section(
            b,
            a,
            source=source,
            first=first,
            adder=f"y{number}",
            label=lambda text, number=number: f"section {number}: {text}",  # type: ignore[misc]
        )
        blocks += chain
        first += len(a) - 1
        gain = Fraction(1)
    return BlockGraph("cascade", tuple(blocks), source)
