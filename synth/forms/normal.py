"""A cascade of second-order sections of least noise (Mullis and Roberts 1976, Hwang 1977).

With -c the mean of a section's two poles and A's two diagonal elements equal,

    x1' = -c x1 + p x2 + u,   x2' = -q x1 - c x2 + r u,   y = c1 x1 + c2 x2 + d u

has the poles of s^2 + a1 s + a0 for any p q = a0 - c^2, exactly in rationals; p near q makes A a
rotation with damping, a normal matrix, for a pair of complex poles.  The ratio r is that at which
u reaches x1 as x2 reaches y: c1 = r c2.  Then A^T, C^T are A, B with the two states exchanged, so
the Gramians K and W are exchanged too, K11 W11 = K22 W22, and sum sqrt(K_ii W_ii) is the sum of
the Hankel singular values, which no realization falls below (all from memory; the tests compute
both).  Such an r exists unless the poles are real with residues of one sign; these are two
first-order sections side by side, which are balanced then, again of least noise.

The numerator of a section comes from a sum that cancels, zeros at the origin included.
"""

from __future__ import annotations

from fractions import Fraction

from synth.forms.sectionwise import Biquad, in_cascade, rational_root
from synth.graph import Block, BlockGraph, Term
from synth.transfer import TransferFunction

__all__ = ["normal"]


def normal(target: TransferFunction) -> BlockGraph:
    """The cascade of minimum-noise sections of a proper H(s), weights exact as far as the factors
    are; a pair of real poles side by side has them to 16 digits where they are irrational."""
    return in_cascade("normal", target, _section)


def _section(of: Biquad) -> tuple[list[Block], str]:
    (b0, b1, direct), (a0, a1) = of.b, of.a
    mean = a1 / 2
    # What is left behind the direct path: slope (s + mean) + rest.
    slope = b1 - direct * a1
    rest = b0 - direct * a0 - mean * slope
    square = a0 - mean**2
    if square < 0 and rest**2 + slope**2 * square <= 0:
        return _side_by_side(of, mean, rational_root(-square), slope, rest)
    p = rational_root(abs(square))
    q = square / p if square else of.rate
    bent = rational_root(rest**2 + slope**2 * square)
    r = -q * slope / (rest + (bent if rest > 0 else -bent)) if slope else Fraction(0)
    r = Fraction(float(r))
    to_second = (p * r * slope - rest) / (q + p * r**2)
    to_first = slope - r * to_second
    # A single output is the second state itself, with the gain at the input.
    alone = not direct and not to_first
    gain = to_second if alone else Fraction(1)
    x1, x2 = of.first, of.second
    one = of.term(of.source, gain, f"input into {x1}")
    one += of.term(x1, -mean, f"damping of {x1}") + of.term(x2, p, f"frequency, {x2} into {x1}")
    two = of.term(x1, -q, f"frequency, {x1} into {x2}") + of.term(x2, -mean, f"damping of {x2}")
    two += of.term(of.source, r * gain, f"input into {x2}")
    blocks = [Block(x1, "integrator", tuple(one)), Block(x2, "integrator", tuple(two))]
    return (blocks, x2) if alone else _summed(of, blocks, direct, to_first, to_second)


def _side_by_side(
    of: Biquad, mean: Fraction, half: Fraction, slope: Fraction, rest: Fraction
) -> tuple[list[Block], str]:
    """Two first-order sections at -mean +- half and the sum of their outputs."""
    blocks = []
    for name, pole in ((of.first, half - mean), (of.second, -half - mean)):
        terms = of.term(of.source, half / half, f"input into {name}")
        terms += of.term(name, pole, f"pole of {name}")
        blocks.append(Block(name, "integrator", tuple(terms)))
    first, second = (slope + rest / half) / 2, (slope - rest / half) / 2
    return _summed(of, blocks, of.b[2], first, second)


def _summed(
    of: Biquad, blocks: list[Block], direct: Fraction, first: Fraction, second: Fraction
) -> tuple[list[Block], str]:
    """With an adder for the output."""
    total: list[Term] = of.term(of.source, direct, "input to the output")
    total += of.term(of.first, first, f"{of.first} to the output")
    total += of.term(of.second, second, f"{of.second} to the output")
    name = f"y{of.number}"
    return [*blocks, Block(name, "adder", tuple(total))], name
