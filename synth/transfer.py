"""Transfer functions: exact coefficients beside accurate roots.

Polynomials are in descending powers of s, s in rad/s.  Coefficients are exact rationals;
roots are doubles, and every root or conjugate pair is one real monic `Factor`.  Responses
are products over factors, which stays accurate where an expanded polynomial would cancel.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth import polynomials
from synth.errors import TargetError

__all__ = ["Factor", "TransferFunction"]

Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class Factor:
    """A monic real factor of degree 1, ``(1, a0)``, or 2, ``(1, a1, a0)``, with complex roots
    or a pair of real ones given as a pair."""

    coefficients: tuple[Fraction, ...]

    def __post_init__(self) -> None:
        if len(self.coefficients) not in (2, 3) or self.coefficients[0] != 1:
            raise TargetError(f"got {self.coefficients}, expected a monic factor of degree 1 or 2")

    @classmethod
    def real(cls, root: float | Fraction) -> Factor:
        """The factor s - root, root in rad/s."""
        return cls((Fraction(1), -Fraction(root)))

    @classmethod
    def pair(cls, frequency: float | Fraction, q: float | Fraction) -> Factor:
        """The factor s^2 + (w0/q) s + w0^2, w0 = `frequency` in rad/s; q may be infinite, and
        a negative frequency puts the pair into the right half-plane."""
        w0 = Fraction(frequency)
        damping = Fraction(0) if q == math.inf else w0 / Fraction(q)
        return cls((Fraction(1), damping, w0 * w0))

    @property
    def degree(self) -> int:
        """1 or 2."""
        return len(self.coefficients) - 1

    @cached_property
    def roots(self) -> tuple[complex, ...]:
        """The roots [rad/s]; a pair as (negative, positive imaginary part) or two reals."""
        if self.degree == 1:
            return (complex(-float(self.coefficients[1])),)
        b, c = self.coefficients[1], self.coefficients[2]
        square = b * b / 4 - c
        if square < 0:
            half = math.sqrt(float(-square))
            return (complex(-float(b) / 2, -half), complex(-float(b) / 2, half))
        half = math.sqrt(float(square))
        large = -float(b) / 2 - math.copysign(half, float(b))
        small = float(c) / large if large else 0.0
        return tuple(complex(r) for r in sorted((large, small)))

    @property
    def natural_frequency(self) -> float:
        """|root| of a real factor, or w0 of a pair [rad/s]."""
        last = abs(float(self.coefficients[-1]))
        return last if self.degree == 1 else math.sqrt(last)

    @property
    def q(self) -> float:
        """w0/a1 of a pair (negative in the right half-plane, inf on the axis); 0.5 of a real
        factor."""
        if self.degree == 1:
            return 0.5
        a1 = float(self.coefficients[1])
        return self.natural_frequency / a1 if a1 else math.inf

    def at(self, s: Complex) -> Complex:
        """The value of the factor at complex frequencies `s` [rad/s]."""
        if self.degree == 1:
            return s + float(self.coefficients[1])
        _, b, c = (float(k) for k in self.coefficients)
        return s * s + b * s + c


@dataclass(frozen=True)
class TransferFunction:
    """H(s) = numerator / denominator = gain * product of zero factors / product of pole factors.

    Build one with `from_polynomials` or `from_factors`.

    Attributes
    ----------
    numerator
        Descending powers, leading coefficient `gain`, exact.
    denominator
        Descending powers, monic, exact.
    zero_factors, pole_factors
        Real factors.  Exact when built from factors; otherwise roots found from the
        polynomials, correct to a double.
    factors_are_exact
        Whether the factors multiply out to the polynomials exactly.
    """

    numerator: tuple[Fraction, ...]
    denominator: tuple[Fraction, ...]
    zero_factors: tuple[Factor, ...]
    pole_factors: tuple[Factor, ...]
    factors_are_exact: bool

    @classmethod
    def from_factors(
        cls,
        gain: float | Fraction,
        zero_factors: Iterable[Factor],
        pole_factors: Iterable[Factor],
    ) -> TransferFunction:
        """H(s) from its leading gain (of numerator over monic denominator) and real factors.

        Raises
        ------
        TargetError
            A gain of zero.
        """
        if not gain:
            raise TargetError("got a gain of zero, expected a nonzero number")
        zeros, poles = tuple(zero_factors), tuple(pole_factors)
        numerator = polynomials.product([(Fraction(gain),), *(z.coefficients for z in zeros)])
        denominator = polynomials.product([(Fraction(1),), *(p.coefficients for p in poles)])
        return cls(numerator, denominator, zeros, poles, True)

    @classmethod
    def from_polynomials(
        cls,
        numerator: Sequence[float | Fraction],
        denominator: Sequence[float | Fraction],
    ) -> TransferFunction:
        """H(s) from coefficients, descending powers of s [rad/s].  Common factors stay.

        Raises
        ------
        TargetError
            A zero numerator or denominator.
        NumericalError
            Roots that cannot be told apart, or beyond the range of a double.
        """
        num = polynomials.trimmed([Fraction(c) for c in numerator])
        den = polynomials.trimmed([Fraction(c) for c in denominator])
        for name, polynomial in (("numerator", num), ("denominator", den)):
            if not polynomial:
                raise TargetError(f"got a {name} that is zero, expected a nonzero coefficient")
        lead = den[0]
        num, den = tuple(c / lead for c in num), tuple(c / lead for c in den)
        zeros, zeros_exact = _factors_of(num)
        poles, poles_exact = _factors_of(den)
        return cls(num, den, zeros, poles, zeros_exact and poles_exact)

    @property
    def gain(self) -> Fraction:
        """Leading coefficient of the numerator over the monic denominator, exact."""
        return self.numerator[0]

    @property
    def order(self) -> int:
        """Number of poles."""
        return len(self.denominator) - 1

    @property
    def relative_degree(self) -> int:
        """Number of poles less number of zeros; negative when improper."""
        return len(self.denominator) - len(self.numerator)

    @cached_property
    def poles(self) -> Complex:
        """Poles [rad/s], shape (order,)."""
        return np.array([r for f in self.pole_factors for r in f.roots], dtype=complex)

    @cached_property
    def zeros(self) -> Complex:
        """Finite zeros [rad/s]."""
        return np.array([r for f in self.zero_factors for r in f.roots], dtype=complex)

    @property
    def zeros_at_origin(self) -> int:
        """How many zeros lie at s = 0 exactly."""
        return polynomials.trailing_zeros(self.numerator)

    @property
    def poles_at_origin(self) -> int:
        """How many poles lie at s = 0 exactly."""
        return polynomials.trailing_zeros(self.denominator)

    @property
    def largest_q(self) -> float:
        """The largest |Q| of any pole pair, at least 0.5; inf for a pair on the axis."""
        return max((abs(f.q) for f in self.pole_factors), default=0.5)

    def at(self, s: ArrayLike) -> Complex:
        """H at complex frequencies `s` [rad/s], any shape."""
        points = np.asarray(s, dtype=complex)
        value = np.full(points.shape, float(self.gain), dtype=complex)
        zeros = sorted(self.zero_factors, key=lambda f: f.natural_frequency)
        poles = sorted(self.pole_factors, key=lambda f: f.natural_frequency)
        # Alternating keeps the partial products within range.
        for k in range(max(len(zeros), len(poles))):
            if k < len(poles):
                value = value / poles[k].at(points)
            if k < len(zeros):
                value = value * zeros[k].at(points)
        return value

    def response(self, frequency_hz: ArrayLike) -> Complex:
        """H(j 2 pi f) at frequencies [Hz], any shape."""
        return self.at(2j * np.pi * np.asarray(frequency_hz, dtype=float))

    def negated(self) -> TransferFunction:
        """-H(s)."""
        return TransferFunction(
            tuple(-c for c in self.numerator),
            self.denominator,
            self.zero_factors,
            self.pole_factors,
            self.factors_are_exact,
        )


def _factors_of(polynomial: tuple[Fraction, ...]) -> tuple[tuple[Factor, ...], bool]:
    """Real factors of a polynomial and whether they are exact."""
    roots_at_origin = polynomials.trailing_zeros(polynomial)
    rest = polynomial[: len(polynomial) - roots_at_origin]
    factors = [Factor.real(0)] * roots_at_origin
    exact = True
    for part, multiplicity in polynomials.squarefree_parts(rest):
        found, is_exact = _simple_factors(part)
        exact = exact and is_exact
        factors += [f for f in found for _ in range(multiplicity)]
    return tuple(sorted(factors, key=lambda f: f.natural_frequency)), exact


def _simple_factors(polynomial: tuple[Fraction, ...]) -> tuple[list[Factor], bool]:
    """Real factors of a monic polynomial without repeated roots."""
    if len(polynomial) == 1:
        return [], True
    if len(polynomial) == 2:
        return [Factor(polynomial)], True
    if len(polynomial) == 3 and polynomial[1] ** 2 < 4 * polynomial[2]:
        return [Factor(polynomial)], True
    factors: list[Factor] = []
    for root in polynomials.simple_roots(polynomial):
        re, im = Fraction(root.real), Fraction(root.imag)
        if im == 0:
            factors.append(Factor.real(re))
        elif im > 0:
            factors.append(Factor((Fraction(1), -2 * re, re * re + im * im)))
    return factors, False
