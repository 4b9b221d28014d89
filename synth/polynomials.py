"""Exact polynomial arithmetic on tuples of rationals, descending powers.

The empty tuple is the zero polynomial; every other one has a nonzero leading coefficient.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from fractions import Fraction

from synth.errors import NumericalError

__all__ = [
    "Polynomial",
    "derivative",
    "divide",
    "greatest_common_divisor",
    "multiply",
    "product",
    "simple_roots",
    "squarefree_parts",
    "subtract",
    "trailing_zeros",
    "trimmed",
]

Polynomial = tuple[Fraction, ...]


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
    """The monic greatest common divisor (Euclid); (1,) when coprime."""
    while q:
        _, remainder = divide(p, q)
        p, q = q, tuple(c / remainder[0] for c in remainder)
    return tuple(c / p[0] for c in p)


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

    A complex root comes with its exact conjugate; a real one has imaginary part 0.

    Raises
    ------
    NumericalError
        The roots lie so close together that 400 digits do not separate them.
    """
    import mpmath

    for digits in (50, 120, 400):
        with mpmath.workdps(digits):
            # Scaled to a geometric mean of 1, so that powers of large roots stay harmless.
            n = len(p) - 1
            last = mpmath.mpf(abs(p[-1]).numerator) / abs(p[-1]).denominator
            scale = mpmath.root(last, n)
            scaled = [mpmath.mpf(c.numerator) / c.denominator / scale**k for k, c in enumerate(p)]
            try:
                found = mpmath.polyroots(scaled, maxsteps=60 + digits, extraprec=4 * digits)
            except mpmath.libmp.libhyper.NoConvergence:
                continue
            roots = [complex(r * scale) for r in found]
            tiny = mpmath.mpf(10) ** (-digits // 2)
            real = [abs(mpmath.im(r)) <= tiny * abs(r) for r in found]
        reals = [complex(r.real) for r, is_real in zip(roots, real, strict=True) if is_real]
        above = [r for r, is_real in zip(roots, real, strict=True) if not is_real and r.imag > 0]
        if len(reals) + 2 * len(above) == n:
            return reals + [z for r in above for z in (r.conjugate(), r)]
    raise NumericalError(
        "the roots of a polynomial could not be separated; state the target by its "
        "zeros and poles instead"
    )
