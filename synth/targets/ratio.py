"""Exact arithmetic on ratios of polynomials in s, bounded so that it ends at once.

Common factors that the operands bring along stay: (s+1)/(s+1) keeps its pole and its zero, for
a later stage to cancel with a word.  The arithmetic adds none where it can be helped: sums take
the least common denominator, and a compound fraction is cleared by it.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

from synth.polynomials import (
    Polynomial,
    divide,
    greatest_common_divisor,
    multiply,
    subtract,
    trimmed,
)
from synth.targets.bounds import LARGEST_DEGREE

__all__ = ["LARGEST_EXPONENT", "LARGEST_SIZE", "Ratio", "RatioError"]

LARGEST_EXPONENT = 1000
"""Of a power, either sign."""
LARGEST_SIZE = 4096
"""Of the numerator and the denominator of a coefficient [bit]."""
_ONE: Polynomial = (Fraction(1),)


class RatioError(ValueError):
    """A result that does not exist or grows beyond the bounds; the message says which."""


@dataclass(frozen=True)
class Ratio:
    """numerator / denominator, descending powers; the denominator is monic.

    Raises
    ------
    RatioError
        A degree above `LARGEST_DEGREE` or a coefficient of more than `LARGEST_SIZE` bits.
    """

    numerator: Polynomial
    denominator: Polynomial = _ONE

    def __post_init__(self) -> None:
        _check_degree(self.degree)
        if self.size > LARGEST_SIZE:
            raise RatioError("the numbers grow out of bounds")

    @classmethod
    def constant(cls, value: Fraction) -> Ratio:
        """A number."""
        return cls(trimmed([value]))

    @classmethod
    def variable(cls) -> Ratio:
        """The ratio that is s itself."""
        return cls((Fraction(1), Fraction(0)))

    @property
    def degree(self) -> int:
        """Of the numerator or the denominator, whichever is higher."""
        return max(len(self.numerator), len(self.denominator)) - 1

    @property
    def size(self) -> int:
        """Bits of the largest numerator or denominator of a coefficient."""
        return max(
            max(c.numerator.bit_length(), c.denominator.bit_length())
            for c in (*self.numerator, *self.denominator)
        )

    @property
    def value(self) -> Fraction | None:
        """The number this is, or None when s occurs in it."""
        if self.degree > 0:
            return None
        return self.numerator[0] if self.numerator else Fraction(0)

    def __neg__(self) -> Ratio:
        return Ratio(tuple(-c for c in self.numerator), self.denominator)

    def __add__(self, other: Ratio) -> Ratio:
        left, right = _completions(self.denominator, other.denominator)
        return _ratio(
            subtract(multiply(self.numerator, left), multiply((-other).numerator, right)),
            multiply(self.denominator, left),
        )

    def __sub__(self, other: Ratio) -> Ratio:
        return self + -other

    def __mul__(self, other: Ratio) -> Ratio:
        return _ratio(
            multiply(self.numerator, other.numerator),
            multiply(self.denominator, other.denominator),
        )

    def __truediv__(self, other: Ratio) -> Ratio:
        if not other.numerator:
            raise RatioError("division by zero")
        left, right = _completions(self.denominator, other.denominator)
        return _ratio(multiply(self.numerator, left), multiply(other.numerator, right))

    def __pow__(self, exponent: int) -> Ratio:
        count = abs(exponent)
        if count > LARGEST_EXPONENT:
            raise RatioError(f"got an exponent beyond {LARGEST_EXPONENT}")
        if exponent <= 0 and not self.numerator:
            raise RatioError("division by zero" if exponent else "zero to the power of zero")
        _check_degree(self.degree * count)
        # A power of 2 has one bit more than this estimate, any other fraction fewer.
        if (self.size - 1) * count > LARGEST_SIZE:
            raise RatioError("the numbers grow out of bounds")
        out = Ratio(_ONE)
        for _ in range(count):
            out *= self
        return out if exponent >= 0 else Ratio(_ONE) / out


def _ratio(numerator: Polynomial, denominator: Polynomial) -> Ratio:
    """numerator / denominator with the denominator made monic."""
    if not numerator:
        return Ratio(())
    lead = denominator[0]
    return Ratio(tuple(c / lead for c in numerator), tuple(c / lead for c in denominator))


def _completions(p: Polynomial, q: Polynomial) -> tuple[Polynomial, Polynomial]:
    """The monic factors that bring monic p and q to their least common multiple."""
    if p == q:
        return _ONE, _ONE
    common = greatest_common_divisor(p, q)
    _check_degree(len(p) + len(q) - len(common) - 1)
    return divide(q, common)[0], divide(p, common)[0]


def _check_degree(degree: int) -> None:
    if degree > LARGEST_DEGREE:
        raise RatioError(f"the degree grows to {degree}, expected at most {LARGEST_DEGREE}")
