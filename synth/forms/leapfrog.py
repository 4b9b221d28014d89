"""The leapfrog: a lossless ladder between two resistors, each state a current or a voltage.

For all-pole low-passes H(s) = K / D(s) with poles in the left half-plane.  The ladder is the
one that delivers all available power where |H| is largest (Darlington's synthesis; S. Darlington
1939, from memory).  Scaled to a largest |H| of one, 1 - |H|^2 = |F/D|^2 on the axis, with
F F(-s) = D D(-s) - M, M = min |D(jw)|^2; F/D is the reflection at the input and the impedance
Z = (D + F) / (D - F) a continued fraction in s whose quotients g_k are series inductors and
shunt capacitors in turn, closed by a resistor r (a resistor of 1 on the other side).  Then::

    g_1 x_1' = u - x_1 - x_2,   g_k x_k' = x_{k-1} - x_{k+1},   g_n x_n' = x_{n-1} - r x_n

is the ladder itself, one integrator an element, and x_n the output.  Where |H| is largest no
g_k changes it to first order (Orchard, "Inductorless filters", 1966, from memory).

M touches |D|^2, so roots of F lie on the axis, or at the origin, in pairs that rounding of
the coefficients of D splits by its square root or worse.  What is that close to such a pair
is made one, within `NEGLIGIBLE`; D then follows from F.  All is done in long arithmetic and
the weights are rounded at the end.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np

from synth.errors import RealizationError
from synth.forms.common import with_output
from synth.graph import INPUT, Block, BlockGraph, Term
from synth.polynomials import Polynomial
from synth.transfer import TransferFunction

__all__ = ["Ladder", "leapfrog", "matched_ladder"]

Mp = Any  # a real number of mpmath, which ships no types

# Far above what cancels in |D|^2 of order 12 with poles six decades apart, and in the
# continued fraction.
DIGITS = 200
# A change of |D|^2 relative to itself, at any frequency: above the rounding of coefficients
# given as doubles, below what a response shows.
NEGLIGIBLE = 1e-13
# Newton's steps to a spectral factor: the error halves until it is small, then squares.
FACTOR_STEPS = 300
# An imaginary part this small, relative to the root, is that of a real root found in doubles.
REAL = 1e-5
NOT_FOUND = (
    "board.form: the reflection of the leapfrog's ladder was not found; expected zeros of "
    "|H|max^2 - |H|^2 that are told apart, or another form"
)


@dataclass(frozen=True, kw_only=True)
class Ladder:
    """A doubly terminated ladder for a frequency of 1 rad/s and a source of 1 ohm.

    Parameters
    ----------
    elements
        g_1 ... g_n: series inductor [H], shunt capacitor [F], and so on.
    termination
        Resistor in series with the last inductor [ohm], or conductance across the last
        capacitor [S].
    frequency
        What 1 rad/s stands for [rad/s].
    """

    elements: tuple[float, ...]
    termination: float
    frequency: float


def leapfrog(target: TransferFunction) -> BlockGraph:
    """The leapfrog form of an all-pole low-pass, weights doubles.

    Raises
    ------
    RealizationError
        H(s) has zeros, or poles that are not in the left half-plane.
    """
    zeros = len(target.numerator) - 1
    if zeros:
        have = "a zero" if zeros == 1 else f"{zeros} zeros"
        raise RealizationError(
            f"board.form: the leapfrog needs an all-pole low-pass H(s), got one with {have}; "
            "expected another form"
        )
    if np.any(target.poles.real >= 0):
        where = "in the right half-plane" if np.any(target.poles.real > 0) else "on the axis"
        raise RealizationError(
            f"board.form: the leapfrog needs poles in the left half-plane, got poles {where}; "
            "expected another form"
        )
    ladder = matched_ladder(target.denominator)
    n = target.order
    rates = [ladder.frequency / g for g in ladder.elements]
    blocks = []
    for k, rate in enumerate(rates, start=1):
        before = INPUT if k == 1 else f"x{k - 1}"
        word = "input" if k == 1 else before
        terms = [Term(before, rate, f"g{k}, {word} into x{k}")]
        damping = (k == 1) + ladder.termination * (k == n)
        if damping:
            terms.append(Term(f"x{k}", -rate * damping, f"g{k}, termination at x{k}"))
        if k < n:
            terms.append(Term(f"x{k + 1}", -rate, f"g{k}, x{k + 1} back into x{k}"))
        blocks.append(Block(f"x{k}", "integrator", tuple(terms)))
    level = float(target.gain / math.prod(map(Fraction, rates)))
    return with_output("leapfrog", blocks, [Term(f"x{n}", level, "output")], "y")


def matched_ladder(denominator: Polynomial) -> Ladder:
    """The ladder of K / D(s) with full power where |H| is largest.

    Parameters
    ----------
    denominator
        D, descending, monic, all roots in the left half-plane.

    Raises
    ------
    RealizationError
        The spectral factorisation does not settle.
    """
    import mpmath

    n = len(denominator) - 1
    frequency = math.exp(_log(denominator[-1]) / n)
    unit = Fraction(frequency)
    with mpmath.workdps(DIGITS):
        d = [_long(c / unit ** (n - k)) for k, c in enumerate(reversed(denominator))]
        least = _least(_square(d))
        f = _reflection(d, least)
        square = _square(f)
        square[0] += least
        d = _hurwitz_factor(square, d)
        elements, termination = _continued_fraction(d, f)
        return Ladder(
            elements=tuple(map(float, elements)),
            termination=float(termination),
            frequency=frequency,
        )


def _log(value: Fraction) -> float:
    """ln of a positive rational of any size."""
    return math.log(value.numerator) - math.log(value.denominator)


def _long(value: Fraction) -> Mp:
    import mpmath

    return mpmath.mpf(value.numerator) / value.denominator


def _square(p: Sequence[Mp]) -> list[Mp]:
    """|p(jw)|^2 as a polynomial in w^2, ascending like p."""
    n = len(p) - 1
    out = [p[0] * 0] * (n + 1)
    for j, a in enumerate(p):
        for k, b in enumerate(p):
            if (j + k) % 2 == 0:
                out[(j + k) // 2] += (-1) ** ((j + k) // 2 + k) * a * b
    return out


def _value(p: Sequence[Mp], x: Mp) -> Mp:
    """An ascending polynomial at x."""
    total = p[-1] * 0
    for c in reversed(p):
        total = total * x + c
    return total


def _slope(p: Sequence[Mp]) -> list[Mp]:
    return [k * c for k, c in enumerate(p)][1:]


def _roots(p: Sequence[Mp]) -> list[complex]:
    """Roots of an ascending polynomial in doubles."""
    size = max(map(abs, p))
    return [complex(r) for r in np.roots([float(c / size) for c in reversed(p)])]


def _positive_roots(p: Sequence[Mp]) -> list[Mp]:
    """Positive real roots, simple ones to full length."""
    import mpmath

    found = []
    slope = _slope(p)
    for root in _roots(p):
        if root.real <= 0 or abs(root.imag) > REAL * root.real:
            continue
        x = mpmath.mpf(root.real)
        for _ in range(20):
            down = _value(slope, x)
            step = _value(p, x) / down if down else x * 0
            if abs(step) > x / 10:
                break
            x -= step
        found.append(x)
    return found


def _least(square: Sequence[Mp]) -> Mp:
    """The least value of |D(jw)|^2."""
    return min([square[0], *(_value(square, x) for x in _positive_roots(_slope(square)))])


def _reflection(d: Sequence[Mp], least: Mp) -> list[Mp]:
    """F, ascending: |F|^2 = |D|^2 - `least`, roots on the axis or left of it.

    With all that nearly touches zero made to touch it, if that is within `NEGLIGIBLE`; else
    with the roots off the origin alone made pairs, if so; else as it is.
    """
    square = _square(d)
    rest = [square[0] - least, *square[1:]]
    low = next(k for k, c in enumerate(rest) if c)
    tried = ((_negligible_powers(rest, d), NEGLIGIBLE), (low, NEGLIGIBLE))
    for powers, small in tried:
        split = _split(rest, square, powers, small)
        if split is None:
            continue
        axis, left = split
        made = _product(_square(axis), left)
        change = [a - b for a, b in zip(made, rest, strict=True)]
        if _share(change, d) <= NEGLIGIBLE and not _positive_roots(left):
            return _product(axis, _hurwitz_factor(left, _start(left)))
    split = _split(rest, square, low, 10.0 ** (-DIGITS // 3))
    if split is None:
        raise RealizationError(NOT_FOUND)
    axis, left = split
    return _product(axis, _hurwitz_factor(left, _start(left)))


def _split(
    rest: Sequence[Mp], square: Sequence[Mp], low: int, small: float
) -> tuple[list[Mp], list[Mp]] | None:
    """The factor of F with its roots on the axis, and what is left of `rest` beside it.

    `low` powers are taken to vanish, and minima up to `small` times |D|^2 to be zeros; None if
    these are too many.
    """
    left = list(rest[low:])
    axis: list[Mp] = [left[-1] * 0] * low + [left[-1] / left[-1]]
    # Where x^low left(x) is stationary: roots of low left + x left'.
    for x in _positive_roots([(low + k) * c for k, c in enumerate(rest[low:])]):
        if abs(x**low * _value(rest[low:], x)) > small * _value(square, x):
            continue
        if len(left) < 3:
            return None
        left = _deflated(_deflated(left, x), x)
        axis = _product(axis, [x, x * 0, x / x])
    return axis, left


def _negligible_powers(rest: Sequence[Mp], d: Sequence[Mp]) -> int:
    """How many low powers of w^2 are each nothing beside |D|^2 at every frequency."""
    for k, c in enumerate(rest[:-1]):
        if _share([c * 0] * k + [c], d) > NEGLIGIBLE:
            return k
    return len(rest) - 1


def _share(change: Sequence[Mp], d: Sequence[Mp]) -> float:
    """The largest of |change(w^2)| over |D(jw)|^2."""
    sizes = [abs(r) for r in _roots(d)]
    w = np.geomspace(min(sizes) / 30, max(sizes) * 30, 1000)
    of_d = np.abs(np.polyval([float(c) for c in reversed(d)], 1j * w))
    of_change = np.abs(np.polyval([float(c) for c in reversed(change)], w**2))
    return float(np.max(of_change / of_d / of_d))


def _deflated(p: Sequence[Mp], root: Mp) -> list[Mp]:
    """p / (x - root) without its remainder."""
    out: list[Mp] = []
    carry = p[-1] * 0
    for c in reversed(p):
        carry = carry * root + c
        out.append(carry)
    return out[-2::-1]


def _product(p: Sequence[Mp], q: Sequence[Mp]) -> list[Mp]:
    out = [p[0] * 0] * (len(p) + len(q) - 1)
    for j, a in enumerate(p):
        for k, b in enumerate(q):
            out[j + k] += a * b
    return out


def _start(square: Sequence[Mp]) -> list[Mp]:
    """A polynomial with its roots left of the axis, near the spectral factor of `square`."""
    import mpmath

    one = mpmath.mpf(1)
    roots = _roots(square)
    # Positive real roots are pairs close to the axis, told apart by rounding.
    close = sorted(x.real for x in roots if x.imag == 0 and x.real > 0)
    if len(close) % 2:
        raise RealizationError(NOT_FOUND)
    pairs = [complex(x) for x in close[::2]] + [x for x in roots if x.imag > 0]
    factor = [one]
    for x in pairs:
        s = mpmath.sqrt(mpmath.mpc(-x))
        damping = max(s.real, abs(s) * REAL)
        factor = _product(factor, [damping**2 + s.imag**2, 2 * damping, one])
    for x in roots:
        if x.imag == 0 and x.real <= 0:
            factor = _product(factor, [mpmath.sqrt(mpmath.mpf(-x.real)), one])
    return factor


def _hurwitz_factor(square: Sequence[Mp], start: Sequence[Mp]) -> list[Mp]:
    """The monic f with |f(jw)|^2 = `square`(w^2) and its roots left of the axis.

    Newton's method on the coefficients: G. Wilson, "Factorization of the covariance generating
    function of a pure moving average process", 1969 (from memory).  From a start with its roots
    on the left every step has them there.
    """
    import mpmath

    f = list(start)
    n = len(f) - 1
    if n == 0:
        return f
    enough = mpmath.mpf(10) ** (-DIGITS // 3)
    for _ in range(FACTOR_STEPS):
        error = [a - b for a, b in zip(square, _square(f), strict=True)][:n]
        matrix = mpmath.matrix(n, n)
        for i in range(n):
            for b in range(n):
                a = 2 * i - b
                if 0 <= a <= n:
                    matrix[i, b] = 2 * (-1) ** (i + a) * f[a]
        step = mpmath.lu_solve(matrix, mpmath.matrix(error))
        f = [c + step[k] if k < n else c for k, c in enumerate(f)]
        if all(abs(step[k]) <= enough * abs(f[k]) for k in range(n)):
            return f
    raise RealizationError(NOT_FOUND)


def _continued_fraction(d: Sequence[Mp], f: Sequence[Mp]) -> tuple[list[Mp], Mp]:
    """Quotients in s of (D + F) / (D - F) and the constant that remains."""
    n = len(d) - 1
    upper = [a + b for a, b in zip(d, f, strict=True)]
    lower = [a - b for a, b in zip(d, f, strict=True)][:n]
    elements = []
    for k in range(n):
        g = upper[-1] / lower[-1]
        if g <= 0:
            raise RealizationError(
                "board.form: an element of the leapfrog's ladder is not positive; "
                "expected another form"
            )
        elements.append(g)
        rest = [upper[0], *(a - g * b for a, b in zip(upper[1:], lower, strict=True))]
        # Its two highest powers have cancelled, or of the last one the highest.
        upper, lower = lower, rest[: max(n - k - 1, 1)]
    return elements, lower[0] / upper[0]
