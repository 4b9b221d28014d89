"""The parallel (modal) form: partial fractions, one small section for each pole.

After Gilbert 1963 (from memory), in real arithmetic::

    H = D + sum over distinct pole factors f, k = 1 ... m:  N_k / f^k,  deg N_k < deg f

A real pole is one lossy integrator, bare at the origin; a pair is a loop of two::

    q' = v - a1 q - a0 p,   p' = q,          N_k / f v = c1 q + c0 p
    q' = v - a0 p,          p' = q - a1 p,   N_k / f v = c1 q + (c0 - a1 c1) p

The second, with its damping at the other integrator, is taken where c0 is too small for a
resistor.  Repeated poles are a chain: section k reads p (of a real pole, the integrator) of
section k - 1.  The output adder takes the taps of every section and D.

Why this loop and not a rotation (normal) block: with L2-scaled states and every coefficient
1 % off, the rotation scatters 5 to 20 % less for low-Q low-passes and the same for band-passes
(Butterworth 4: 0.62 against 0.69 dB; band-pass of order 6 and 10 % bandwidth: 3.84 against
3.83 dB), but takes one more resistor a pair and an irrational frequency.  Fed at both
integrators with the output from one, the loop is noisier by up to a fifth.

Zeros of H arise by subtraction of sections, so stop-bands and zeros at the origin are only
as good as the parts.  A pole that H cancels exactly has no section.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from fractions import Fraction

from synth import polynomials
from synth.forms.common import with_output
from synth.graph import INPUT, Block, BlockGraph, Term
from synth.polynomials import Polynomial
from synth.transfer import TransferFunction

__all__ = ["parallel", "partial_fractions"]

# Below this ratio of the two taps of a pair, at its own frequency, the smaller one takes a
# resistor out of range: other coordinates have a larger one.
SMALL_TAP = 1e-3

# Below this it is what rounding of the stated poles leaves of nothing (a Butterworth of odd
# order has a pair without c0), and is left out.
ROUNDING = 1e-13


def parallel(target: TransferFunction) -> BlockGraph:
    """The parallel form of a proper H(s), weights exact as far as the factors are.

    Of factors that are exact to a double only, the residues still add up to the given
    numerator exactly.
    """
    blocks: list[Block] = []
    output: list[Term] = []
    for number, (factor, residues) in enumerate(_fractions_of(target), start=1):
        label = f"pole {number}" if len(factor) == 2 else f"pair {number}"
        source = INPUT
        for power, residue in enumerate(residues, start=1):
            name = label if len(residues) == 1 else f"{label}, power {power}"
            taps, second = _taps(factor, residue)
            section = _section(factor, source, len(blocks) + 1, name, damped_second=second)
            blocks += section
            output += [
                Term(b.name, c, f"{name}: {b.name} to output")
                for b, c in zip(section, taps, strict=True)
                if c
            ]
            source = section[-1].name
    if target.relative_degree == 0:
        output.append(Term(INPUT, target.gain, "direct term D, input to output"))
    return with_output("parallel", blocks, output, "y")


def partial_fractions(
    numerator: Polynomial, factors: Iterable[tuple[Polynomial, int]]
) -> list[list[Polynomial]]:
    """N_1 ... N_m of every factor, each of lower degree than its factor, exact.

    Parameters
    ----------
    factors
        Monic, coprime in pairs, with their multiplicities m.

    numerator / product of all f^m is a polynomial plus the sum of all N_k / f^k.

    >>> from fractions import Fraction as F
    >>> s_plus_1, s_plus_2 = (F(1), F(1)), (F(1), F(2))
    >>> partial_fractions((F(1), F(3)), [(s_plus_1, 1), (s_plus_2, 1)])
    [[(Fraction(2, 1),)], [(Fraction(-1, 1),)]]
    """
    powers = [polynomials.product([f] * m) for f, m in factors]
    out: list[list[Polynomial]] = []
    for place, (factor, multiplicity) in enumerate(factors):
        others = polynomials.product(p for k, p in enumerate(powers) if k != place)
        modulus = powers[place]
        inverse = polynomials.inverse_modulo(others, modulus)
        _, rest = polynomials.divide(polynomials.multiply(numerator, inverse), modulus)
        # rest / f^m, written in powers of f: its lowest digit stands over f^m.
        digits: list[Polynomial] = []
        for _ in range(multiplicity):
            rest, digit = polynomials.divide(rest, factor)
            digits.append(digit)
        out.append(digits[::-1])
    return out


def _fractions_of(target: TransferFunction) -> list[tuple[Polynomial, list[Polynomial]]]:
    """Every distinct pole factor with its residues N_1 ... N_m padded to the factor's degree;
    powers that H does not have are left out."""
    factors = _coprime(f.coefficients for f in target.pole_factors)
    found = []
    for (factor, _), residues in zip(
        factors, partial_fractions(target.numerator, factors), strict=True
    ):
        while residues and not residues[-1]:
            residues.pop()
        zero = (Fraction(0),)
        padded = [zero * (len(factor) - 1 - len(r)) + r for r in residues]
        if padded:
            found.append((factor, padded))
    return found


def _coprime(factors: Iterable[Polynomial]) -> list[tuple[Polynomial, int]]:
    """The factors with their multiplicities, pairs of rational real roots taken apart.

    Distinct ones are then coprime: two rational quadratics with one root in common have
    rational roots.
    """
    counts: dict[Polynomial, int] = {}
    for factor in factors:
        for part in _taken_apart(factor):
            counts[part] = counts.get(part, 0) + 1
    return list(counts.items())


def _taken_apart(factor: Polynomial) -> list[Polynomial]:
    if len(factor) == 2:
        return [factor]
    _, a1, a0 = factor
    root = _rational_root(a1 * a1 / 4 - a0)
    if root is None:
        return [factor]
    return [(Fraction(1), a1 / 2 + root), (Fraction(1), a1 / 2 - root)]


def _rational_root(square: Fraction) -> Fraction | None:
    """The square root where it is rational, otherwise None."""
    if square < 0:
        return None
    root = Fraction(math.isqrt(square.numerator), math.isqrt(square.denominator))
    return root if root * root == square else None


def _taps(factor: Polynomial, residue: Polynomial) -> tuple[Polynomial, bool]:
    """What the output takes of a section's integrators, in order, and whether the damping of
    a pair belongs to the second."""
    if len(factor) == 2:
        return residue, False
    (_, a1, a0), (c1, c0), zero = factor, residue, Fraction(0)
    # Squares at the natural frequency, exact: |c0| and |c1 w0|.
    of_p, of_q = c0 * c0, c1 * c1 * a0
    if of_p < ROUNDING**2 * of_q:
        return (c1, zero), False
    if of_q < ROUNDING**2 * of_p:
        return (zero, c0), False
    if 0 < of_p < SMALL_TAP**2 * of_q and a1:
        return (c1, c0 - a1 * c1), True
    return residue, False


def _section(
    factor: Polynomial, source: str, first: int, label: str, *, damped_second: bool
) -> tuple[Block, ...]:
    """Lossy integrator, or the two of a pair, from `source`; names from x{first} on."""
    one, head, last = Fraction(1), f"x{first}", f"x{first + len(factor) - 2}"
    fed = Term(source, one, f"{label}: {'input' if source == INPUT else source} into {head}")
    if len(factor) == 2:
        back = [Term(head, -factor[1], f"{label}: a0, feedback of {head}")]
        return (Block(head, "integrator", (fed, *(t for t in back if t.weight))),)
    _, a1, a0 = factor
    damped = last if damped_second else head
    damping = [Term(damped, -a1, f"{label}: a1, feedback of {damped}")] if a1 else []
    loop = Term(last, -a0, f"{label}: a0, feedback of {last}")
    onward = Term(head, one, f"{label}: {head} into {last}")
    q = (fed, loop) if damped_second else (fed, *damping, loop)
    p = (onward, *damping) if damped_second else (onward,)
    return Block(head, "integrator", q), Block(last, "integrator", p)
