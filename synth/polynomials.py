"""Exact polynomial arithmetic on tuples of rationals, descending powers.

The empty tuple is the zero polynomial; every other one has a nonzero leading coefficient.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from fractions import Fraction

from synth.polynomial_roots import separated_roots

__all__ = [
    "Polynomial",
    "derivative",
    "divide",
    "greatest_common_divisor",
    "inverse_modulo",
    "multiply",
    "product",
    "simple_roots",
    "squarefree_parts",
    "subtract",
    "trailing_zeros",
    "trimmed",
]

Polynomial = tuple[Fraction, ...]
_PRIME = 2**61 - 1


def trimmed(coefficients: Sequence[Fraction]) -> Polynomial:
    """The polynomial without leading zeros."""
    start = next((k for k, c in enumerate(coefficients) if c), len(coefficients))
    return tuple(coefficients[start:])


def trailing_zeros(p: Polynomial) -> int:
    """Multiplicity of the root at the origin of a nonzero polynomial."""
    return next(k for k, c in enumerate(reversed(p)) if c)


def multiply(p: Polynomial, q: Polynomial) -> Polynomial:
    """p q."""
    if not p or not q:
        return ()
    out = [Fraction(0)] * (len(p) + len(q) - 1)
    for i, a in enumerate(p):
        for j, b in enumerate(q):
            out[i + j] += a * b
    return tuple(out)


def product(factors: Iterable[Polynomial]) -> Polynomial:
    """The product of all, 1 for none."""
    out: Polynomial = (Fraction(1),)
    for factor in factors:
        out = multiply(out, factor)
    return out


def subtract(p: Polynomial, q: Polynomial) -> Polynomial:
    """p - q."""
    n = max(len(p), len(q))
    a = (Fraction(0),) * (n - len(p)) + p
    b = (Fraction(0),) * (n - len(q)) + q
    return trimmed([x - y for x, y in zip(a, b, strict=True)])


def divide(p: Polynomial, q: Polynomial) -> tuple[Polynomial, Polynomial]:
    """Quotient and remainder of p / q, q nonzero."""
    rest = list(p)
    quotient: list[Fraction] = []
    for k in range(len(p) - len(q) + 1):
        factor = rest[k] / q[0]
        quotient.append(factor)
        for j, c in enumerate(q):
            rest[k + j] -= factor * c
    return trimmed(quotient), trimmed(rest)


def greatest_common_divisor(p: Polynomial, q: Polynomial) -> Polynomial:
    """The monic greatest common divisor; (1,) when coprime, () of two zero polynomials.

    Euclid on primitive integer polynomials, after a test modulo a prime that settles most
    coprime pairs at once.
    """
    a, b = _primitive(p), _primitive(q)
    if a and b and _coprime_modulo_prime(a, b):
        return (Fraction(1),)
    while b:
        a, b = b, _primitive(_pseudo_remainder(a, b))
    return tuple(Fraction(c, a[0]) for c in a)


def inverse_modulo(p: Polynomial, modulus: Polynomial) -> Polynomial:
    """The q of lower degree than `modulus` with p q = 1 modulo `modulus`, p coprime to it.

    Extended Euclid with monic remainders, which keeps the rationals short.

    >>> from fractions import Fraction as F
    >>> inverse_modulo((F(1), F(2)), (F(1), F(0), F(1)))
    (Fraction(-1, 5), Fraction(2, 5))
    """
    _, remainder = divide(p, modulus)
    before, now = modulus, remainder
    factor_before: Polynomial = ()
    factor: Polynomial = (Fraction(1),)
    while len(now) > 1:
        quotient, rest = divide(before, now)
        step = subtract(factor_before, multiply(quotient, factor))
        before, factor_before = now, factor
        now, factor = tuple(c / rest[0] for c in rest), tuple(c / rest[0] for c in step)
    return tuple(c / now[0] for c in factor)


def _primitive(p: Sequence[Fraction | int]) -> tuple[int, ...]:
    """The multiple of p whose coefficients are integers without a common factor."""
    if not p:
        return ()
    common = math.lcm(*(c.denominator for c in p))
    whole = [c.numerator * (common // c.denominator) for c in p]
    content = math.gcd(*whole)
    return tuple(c // content for c in whole)


def _pseudo_remainder(p: Sequence[int], q: Sequence[int]) -> tuple[int, ...]:
    """The remainder of p / q times a nonzero integer, q nonzero."""
    rest = list(p)
    while len(rest) >= len(q):
        lead = rest[0]
        rest = [q[0] * c for c in rest]
        for k, c in enumerate(q):
            rest[k] -= lead * c
        del rest[0]
    start = next((k for k, c in enumerate(rest) if c), len(rest))
    return tuple(rest[start:])


def _coprime_modulo_prime(p: Sequence[int], q: Sequence[int]) -> bool:
    """Whether p and q are coprime modulo one large prime, which proves them coprime.

    A common divisor keeps its degree modulo a prime that does not divide a leading
    coefficient; False proves nothing.
    """
    a, b = [c % _PRIME for c in p], [c % _PRIME for c in q]
    if not a[0] or not b[0]:
        return False
    while b:
        inverse = pow(b[0], -1, _PRIME)
        while len(a) >= len(b):
            factor = a[0] * inverse % _PRIME
            for k, c in enumerate(b):
                a[k] = (a[k] - factor * c) % _PRIME
            del a[0]
        start = next((k for k, c in enumerate(a) if c), len(a))
        a, b = b, a[start:]
    return len(a) == 1


def derivative(p: Polynomial) -> Polynomial:
    """dp/ds."""
    n = len(p) - 1
    return trimmed([c * (n - k) for k, c in enumerate(p[:-1])])


def squarefree_parts(p: Polynomial) -> list[tuple[Polynomial, int]]:
    """Monic factors without repeated roots and their multiplicities (Yun's algorithm).

    D. Y. Y. Yun, "On square-free decomposition algorithms", SYMSAC 1976 (from memory).
    """
    monic = tuple(c / p[0] for c in p)
    if len(monic) == 1:
        return []
    slope = derivative(monic)
    common = greatest_common_divisor(monic, slope)
    w, _ = divide(monic, common)
    y, _ = divide(slope, common)
    parts: list[tuple[Polynomial, int]] = []
    multiplicity = 1
    while len(w) > 1:
        z = subtract(y, derivative(w))
        part = greatest_common_divisor(w, z)
        if len(part) > 1:
            parts.append((part, multiplicity))
        w, _ = divide(w, part)
        y, _ = divide(z, part)
        multiplicity += 1
    return parts


def simple_roots(p: Polynomial) -> list[complex]:
    """Roots of a monic polynomial without repeated roots, each correct to a double.

    Real and imaginary part are each correct.  A complex root follows its exact conjugate; a
    real root has imaginary part 0, one on the imaginary axis has real part 0.

    Raises
    ------
    NumericalError
        The roots lie too close together to be separated, or beyond the range of a double.
    """
    if not p[-1]:
        return [0j, *simple_roots(p[:-1])]
    # Roots that have their mirror image in the origin, among them every pair on the imaginary
    # axis, are those of the common divisor of the even and the odd part.
    n = len(p) - 1
    even = trimmed([c if (n - k) % 2 == 0 else Fraction(0) for k, c in enumerate(p)])
    mirrored = greatest_common_divisor(even, subtract(p, even))
    rest, _ = divide(p, mirrored)
    roots = [*separated_roots(mirrored, mirrored=True), *separated_roots(rest)]
    reals = sorted((r for r in roots if r.imag == 0), key=abs)
    above = sorted((r for r in roots if r.imag > 0), key=abs)
    return reals + [z for r in above for z in (r.conjugate(), r)]
