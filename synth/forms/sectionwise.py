"""Cascades of sections of any kind, and what the kinds of sections share.

The sections and their order are those of `synth.forms.pairing`; how a section of second order is
built is each form's own.  One of first order is the short observable chain in all of them.  The
gain of H(s) stands in the first section; scaling spreads it afterwards.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction

from synth import polynomials
from synth.forms.observable import observable_section
from synth.forms.pairing import sections
from synth.graph import INPUT, Block, BlockGraph, Term
from synth.transfer import TransferFunction

__all__ = ["Biquad", "in_cascade", "rational_root"]


@dataclass(frozen=True, kw_only=True)
class Biquad:
    """A section (b2 s^2 + b1 s + b0) / (s^2 + a1 s + a0) and the names it is built with.

    Parameters
    ----------
    b, a
        b0, b1, b2 and a0, a1.
    source
        What the section reads as its input.
    number
        Its place in the cascade, from 1; also the number of its adders.
    first, second
        Names of its integrators.
    """

    b: tuple[Fraction, Fraction, Fraction]
    a: tuple[Fraction, Fraction]
    source: str
    number: int
    first: str
    second: str

    def term(self, source: str, weight: Fraction, sets: str) -> list[Term]:
        """The term with the section named in what it sets; none for a weight of zero."""
        return [Term(source, weight, f"section {self.number}: {sets}")] if weight else []

    @property
    def rate(self) -> Fraction:
        """A rational near sqrt |a0| [1/s]: the section's frequency, for both integrators.

        With poles at the origin, the next coefficient that gives a rate.
        """
        a0, a1 = self.a
        b0, b1, _ = self.b
        return rational_root(abs(a0)) or abs(a1) or rational_root(abs(b0)) or abs(b1) or Fraction(1)


def rational_root(square: Fraction) -> Fraction:
    """The root of a rational that is not negative: exact where it has one, to 16 digits where
    not."""
    parts = math.isqrt(square.numerator), math.isqrt(square.denominator)
    root = Fraction(*parts)
    return root if root**2 == square else Fraction(math.sqrt(square))


def in_cascade(
    form: str,
    target: TransferFunction,
    section: Callable[[Biquad], tuple[list[Block], str]] | None = None,
) -> BlockGraph:
    """The cascade of a proper H(s) whose sections of second order `section` builds.

    `section` returns the blocks and the name of the one that is the section's output; without it
    every section is an observable chain.
    """
    blocks: list[Block] = []
    source, first = INPUT, 1
    gain = target.gain
    for number, each in enumerate(sections(target), start=1):
        denominator = polynomials.product(p.coefficients for p in each.poles)
        numerator = polynomials.product([(gain,), *(z.coefficients for z in each.zeros)])
        a = tuple(reversed(denominator))
        b = (*reversed(numerator), *[Fraction(0)] * (len(a) - len(numerator)))
        if section is not None and len(a) == 3:
            built, source = section(
                Biquad(
                    b=(b[0], b[1], b[2]),
                    a=(a[0], a[1]),
                    source=source,
                    number=number,
                    first=f"x{first}",
                    second=f"x{first + 1}",
                )
            )
            blocks += built
        else:
            chain, source = observable_section(
                list(b),
                list(a),
                source=source,
                first=first,
                adder=f"y{number}",
                label=lambda text, number=number: f"section {number}: {text}",  # type: ignore[misc]
            )
            blocks += chain
        first += len(a) - 1
        gain = Fraction(1)
    return BlockGraph(form, tuple(blocks), source)
