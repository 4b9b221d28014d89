"""What every way of stating H(s) keeps to: finite numbers, degrees and frequencies in reach.

The bounds lie far beyond any board; they keep the arithmetic within the range of a double and
within a blink of time.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from fractions import Fraction

from synth.errors import NumericalError, TargetError
from synth.polynomials import Polynomial, trimmed
from synth.transfer import Factor, TransferFunction

__all__ = [
    "LARGEST_DEGREE",
    "LARGEST_ORDER",
    "TWO_PI",
    "checked_number",
    "frequency_text",
    "from_exact_polynomials",
    "root_text",
    "within_reach",
]

LARGEST_ORDER = 12
"""Poles of a target that can be built, after cancelling."""
LARGEST_DEGREE = 2 * LARGEST_ORDER
"""Degree of a numerator or denominator as stated, before cancelling."""
LOWEST_HZ, HIGHEST_HZ = Fraction(1, 10**12), Fraction(10**12)
"""Roots away from the origin lie between these."""
LOWEST_GAIN, HIGHEST_GAIN = Fraction(1, 10**250), Fraction(10**250)
"""The leading coefficient over the monic denominator lies between these."""
TWO_PI = 2 * Fraction(math.pi)
"""The rational that stands for 2 pi wherever Hz become rad/s, so that factors stay exact."""


def checked_number(value: object, *, key: str, expected: str = "a finite number") -> Fraction:
    """The exact value of a finite number.

    Raises
    ------
    TargetError
        Anything but a finite integer, float or rational.
    """
    if isinstance(value, bool) or not isinstance(value, int | float | Fraction):
        raise TargetError(f"got {value!r:.60}, expected {expected}", key=key)
    if not math.isfinite(value):
        raise TargetError(f"got {value}, expected {expected}", key=key)
    return Fraction(value)


def from_exact_polynomials(
    numerator: Sequence[Fraction], denominator: Sequence[Fraction], *, key: str
) -> TransferFunction:
    """H(s) from its polynomials, whose degrees and roots are kept within the bounds.

    Raises
    ------
    TargetError
        A zero polynomial, a degree or a root beyond the bounds, roots too close to separate.
    """
    for name, polynomial in (("numerator", numerator), ("denominator", denominator)):
        p = trimmed(polynomial)
        if not p:
            raise TargetError(f"the {name} is zero, expected a nonzero coefficient", key=key)
        if len(p) - 1 > LARGEST_DEGREE:
            raise TargetError(
                f"the {name} has degree {len(p) - 1}, expected at most {LARGEST_DEGREE}", key=key
            )
        _check_reach(p, key=key)
    try:
        target = TransferFunction.from_polynomials(numerator, denominator)
    except NumericalError as error:
        raise TargetError(str(error), key=key) from None
    return within_reach(target, key=key)


def _check_reach(p: Polynomial, *, key: str) -> None:
    """Refuse coefficients that only roots beyond the bounds can give, before any root is
    sought: the k-th elementary symmetric function of n roots below r is at most C(n, k) r^k."""
    while not p[-1]:
        p = p[:-1]
    n = len(p) - 1
    for k, c in enumerate(p):
        ways = math.comb(n, k)
        if abs(c / p[0]) > ways * (TWO_PI * HIGHEST_HZ) ** k:
            raise _out_of_reach("above", key)
        if abs(c / p[-1]) > ways / (TWO_PI * LOWEST_HZ) ** (n - k):
            raise _out_of_reach("below", key)


def within_reach(target: TransferFunction, *, key: str) -> TransferFunction:
    """The target itself, when its roots and its gain lie within the bounds.

    Raises
    ------
    TargetError
        They do not.
    """
    for polynomial in (target.numerator, target.denominator):
        _check_reach(polynomial, key=key)
    for root in (*target.zeros, *target.poles):
        hz = abs(root) / float(TWO_PI)
        if hz > HIGHEST_HZ:
            raise _out_of_reach("above", key)
        if 0 < hz < LOWEST_HZ:
            raise _out_of_reach("below", key)
    if not LOWEST_GAIN <= abs(target.gain) <= HIGHEST_GAIN:
        raise TargetError(
            "the ratio of the leading coefficients of H(s) lies outside 1e-250 to 1e250", key=key
        )
    return target


def _out_of_reach(side: str, key: str) -> TargetError:
    bound = float(HIGHEST_HZ if side == "above" else LOWEST_HZ)
    return TargetError(
        f"a root of H(s) lies {side} {bound:g} Hz, expected roots at the origin or between "
        f"{float(LOWEST_HZ):g} Hz and {float(HIGHEST_HZ):g} Hz (coefficients go with s in rad/s)",
        key=key,
    )


def frequency_text(hz: float, digits: int = 4) -> str:
    """A frequency as people read it, with a prefix from 1 kHz up.

    >>> frequency_text(1234.56), frequency_text(120), frequency_text(0.05)
    ('1.235 kHz', '120 Hz', '0.05 Hz')
    """
    for unit, prefix in ((1e9, "G"), (1e6, "M"), (1e3, "k")):
        if float(f"{hz:.{digits}g}") >= unit:
            return f"{hz / unit:.{digits}g} {prefix}Hz"
    return f"{hz:.{digits}g} Hz"


def root_text(factor: Factor, digits: int = 4) -> str:
    """The roots of a factor as people read them, with Q for a pair.

    >>> root_text(Factor.pair(TWO_PI * 1000, Fraction(4, 5)))
    '1 kHz (Q = 0.8)'
    >>> root_text(Factor.real(TWO_PI * 3000))
    '3 kHz in the right half-plane'
    """
    first = factor.roots[0]
    if not first.imag:
        return " and ".join(_real_text(r.real, digits) for r in factor.roots)
    text = frequency_text(factor.natural_frequency / float(TWO_PI), digits)
    if not first.real:
        return f"{text} on the imaginary axis"
    side = " in the right half-plane" if first.real > 0 else ""
    return f"{text} (Q = {abs(factor.q):.{digits}g}){side}"


def _real_text(root: float, digits: int) -> str:
    if not root:
        return "the origin"
    side = " in the right half-plane" if root > 0 else ""
    return frequency_text(abs(root) / float(TWO_PI), digits) + side
