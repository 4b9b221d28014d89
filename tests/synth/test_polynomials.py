"""Exact polynomial arithmetic and the roots found by it."""

from __future__ import annotations

import math
import subprocess
import sys
from fractions import Fraction

import numpy as np
import pytest
import sympy
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from synth import polynomials
from synth.errors import NumericalError

whole = st.integers(-9, 9)
coefficients = st.lists(whole, min_size=1, max_size=6).map(
    lambda c: polynomials.trimmed([Fraction(x, 3) for x in c])
)
nonzero = coefficients.filter(bool)

S = sympy.Symbol("s")


def _poly(p: polynomials.Polynomial) -> sympy.Poly:
    values = [sympy.Rational(c.numerator, c.denominator) for c in p] or [sympy.Integer(0)]
    return sympy.Poly(values, S, domain="QQ")


def _tuple(p: sympy.Poly) -> polynomials.Polynomial:
    return polynomials.trimmed([Fraction(int(c.p), int(c.q)) for c in p.all_coeffs()])


def _from_roots(*roots: Fraction | int) -> polynomials.Polynomial:
    return polynomials.product([(Fraction(1), -Fraction(r)) for r in roots])


@settings(deadline=None, derandomize=True, max_examples=60)
@given(coefficients, nonzero)
def test_division_gives_the_dividend_back(p, q):
    quotient, remainder = polynomials.divide(p, q)
    assert len(remainder) < len(q)
    assert polynomials.subtract(p, polynomials.multiply(quotient, q)) == remainder


@settings(deadline=None, derandomize=True, max_examples=60)
@given(nonzero, nonzero, nonzero)
def test_the_common_divisor_is_the_one_sympy_finds(p, q, r):
    p, q = polynomials.multiply(p, r), polynomials.multiply(q, r)
    assert polynomials.greatest_common_divisor(p, q) == _tuple(
        sympy.gcd(_poly(p), _poly(q)).monic()
    )


def test_the_common_divisor_survives_a_lead_that_vanishes_modulo_the_prime():
    prime = 2**61 - 1
    common = (Fraction(prime), Fraction(1))
    p = polynomials.multiply(common, (Fraction(1), Fraction(2)))
    q = polynomials.multiply(common, (Fraction(1), Fraction(3)))
    assert polynomials.greatest_common_divisor(p, q) == (1, Fraction(1, prime))


def test_a_common_divisor_modulo_the_prime_alone_is_none():
    prime = 2**61 - 1
    p, q = (Fraction(1), Fraction(1)), (Fraction(1), Fraction(1 + prime))
    assert polynomials.greatest_common_divisor(p, q) == (1,)


@settings(deadline=None, derandomize=True, max_examples=40)
@given(nonzero, nonzero)
def test_squarefree_parts_multiply_back_and_have_no_repeated_root(p, q):
    full = polynomials.product([p, p, p, q])
    parts = polynomials.squarefree_parts(full)
    rebuilt = polynomials.product(part for part, times in parts for _ in range(times))
    assert rebuilt == tuple(c / full[0] for c in full)
    for part, _ in parts:
        slope = polynomials.derivative(part)
        assert polynomials.greatest_common_divisor(part, slope) == (1,)


@pytest.mark.parametrize(
    "roots",
    [
        [-(Fraction(10) ** k) for k in range(-6, 6)],
        [-(Fraction(10) ** (10 * k)) for k in range(-6, 6)],
        [-Fraction(k) for k in range(1, 13)],
        [-1 - Fraction(k, 10**8) for k in range(12)],
        [-1 - Fraction(7 * k * k + k, 3 * 10**10) for k in range(3)],
        [-1 - Fraction(k, 10**14) for k in range(6)],
        [Fraction(3), Fraction(-3), Fraction(1, 3), Fraction(-7)],
    ],
    ids=[
        "12 decades",
        "110 decades",
        "integers",
        "cluster 1e-8",
        "cluster 1e-10",
        "cluster 1e-14",
        "both sides",
    ],
)
def test_real_roots_come_back_to_the_last_digit(roots):
    found = polynomials.simple_roots(_from_roots(*roots))
    assert [z.imag for z in found] == [0.0] * len(roots)
    assert sorted(z.real for z in found) == sorted(float(r) for r in roots)


def test_a_pair_far_more_lightly_damped_than_a_double_can_square_keeps_its_damping():
    w0, damping = Fraction(1000), Fraction(1, 10**9)
    pair = (Fraction(1), 2 * damping, w0 * w0)
    found = polynomials.simple_roots(polynomials.multiply(pair, _from_roots(-5, -1000)))
    above = [z for z in found if z.imag > 0]
    assert [z.real for z in above] == [float(-damping)]
    assert above[0].imag == pytest.approx(math.sqrt(float(w0**2 - damping**2)), rel=1e-15)


def test_pairs_on_the_imaginary_axis_have_no_real_part_and_others_keep_theirs():
    on_axis = polynomials.multiply(
        (Fraction(1), Fraction(0), Fraction(2)), (Fraction(1), Fraction(0), Fraction(5))
    )
    beside = (Fraction(1), Fraction(1, 10**30), Fraction(3))
    found = polynomials.simple_roots(polynomials.product([on_axis, beside, _from_roots(-2, 2, -1)]))
    above = sorted((z for z in found if z.imag > 0), key=abs)
    assert [z.real for z in above] == [0.0, -0.5e-30, 0.0]
    assert [z.imag for z in above] == pytest.approx([2**0.5, 3**0.5, 5**0.5], rel=1e-15)
    assert sorted(z.real for z in found if not z.imag) == [-2.0, -1.0, 2.0]


@settings(deadline=None, derandomize=True, max_examples=15)
@given(st.lists(st.fractions(1, 10**6), min_size=2, max_size=4, unique=True), st.floats(0.1, 1e6))
def test_any_pairs_on_the_imaginary_axis_are_told_from_damped_ones(squares, pole):
    p = polynomials.product([(Fraction(1), Fraction(0), w) for w in squares])
    found = polynomials.simple_roots(polynomials.multiply(p, _from_roots(-Fraction(pole))))
    above = [z for z in found if z.imag]
    assert {z.real for z in above} == {0.0}
    expected = sorted(math.sqrt(w) for w in squares)
    assert sorted(z.imag for z in above)[len(squares) :] == pytest.approx(expected, rel=1e-15)


def test_complex_roots_stand_behind_their_exact_conjugates():
    found = polynomials.simple_roots(
        (Fraction(1), Fraction(1), Fraction(1), Fraction(3), Fraction(7))
    )
    for below, above in zip(found[::2], found[1::2], strict=True):
        assert above.imag > 0
        assert below == above.conjugate()


def test_a_root_at_the_origin_is_exact():
    assert polynomials.simple_roots(_from_roots(0, -3)) == [0, -3]


@pytest.mark.parametrize("scale", [Fraction(1), Fraction(-1), Fraction(-6283), Fraction(-1, 50)])
def test_wilkinsons_polynomial_moves_as_published(scale: Fraction):
    """J. H. Wilkinson: a19 changed by -2^-23 moves a pair to 16.7307 +- 2.8126j (from memory);
    as poles too, negated and at any frequency: the roots of p(s / scale)."""
    p = list(_from_roots(*range(1, 21)))
    p[1] -= Fraction(1, 2**23)
    moved = tuple(c * scale**k for k, c in enumerate(p))
    found = [z / float(scale) for z in polynomials.simple_roots(moved)]
    pair = min(found, key=lambda z: abs(z - (16.7307 + 2.8126j)))
    assert pair == pytest.approx(16.7307 + 2.8126j, abs=1e-4)
    # Independently, by sympy's own isolation of the real roots.
    assert sum(not z.imag for z in found) == sympy.count_roots(_poly(moved))


def test_roots_agree_with_numpy_where_numpy_is_accurate():
    p = tuple(Fraction(c) for c in (1, 3.2, 8.1, 9.9, 7.3, 2.2))
    mine = np.sort_complex(np.array(polynomials.simple_roots(p)))
    theirs = np.sort_complex(np.roots([float(c) for c in p]))
    np.testing.assert_allclose(mine, theirs, rtol=1e-12)


def test_roots_that_cannot_be_told_apart_are_refused():
    roots = [-1 - Fraction(k, 10**700) for k in range(2)]
    with pytest.raises(NumericalError, match="could not be separated; state the target by its"):
        polynomials.simple_roots(_from_roots(*roots, -2))


def test_roots_beyond_the_range_of_a_double_are_refused():
    with pytest.raises(NumericalError, match="beyond the range of a double"):
        polynomials.simple_roots(_from_roots(-1, -(10**400), Fraction(-1, 10**400)))


def test_the_arithmetic_loads_no_mpmath_until_roots_are_sought():
    script = (
        "import sys, synth.targets as _; print(*(n in sys.modules for n in ('mpmath', 'lark')))"
    )
    shown = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True
    )
    assert shown.stdout.split() == ["False", "False"]


@settings(deadline=None, derandomize=True, max_examples=60)
@given(coefficients, nonzero)
def test_an_inverse_modulo_a_polynomial_is_that_of_sympy(
    p: polynomials.Polynomial, modulus: polynomials.Polynomial
) -> None:
    """Of lower degree than the modulus, and p times it leaves the remainder one."""
    assume(len(modulus) > 1 and len(polynomials.greatest_common_divisor(p, modulus)) == 1)
    found = polynomials.inverse_modulo(p, modulus)
    assert len(found) < len(modulus)
    _, rest = polynomials.divide(polynomials.multiply(found, p), modulus)
    assert rest == (1,)
    assert _poly(found) == sympy.invert(_poly(p), _poly(modulus))
