"""Transfer functions: factors against polynomials, and published prototypes."""

from __future__ import annotations

import math
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from synth.errors import TargetError
from synth.transfer import Factor, TransferFunction

log_frequency = st.floats(0, 6)
reals = log_frequency.map(lambda k: Factor.real(-(10**k)))
pairs = st.tuples(log_frequency, st.floats(-0.29, 2.5), st.booleans()).map(
    lambda p: Factor.pair(10 ** p[0] * (1 if p[2] else -1), 10 ** p[1])
)
factor_lists = st.lists(st.one_of(reals, pairs), min_size=1, max_size=9).map(
    lambda fs: [f for k, f in enumerate(fs) if sum(g.degree for g in fs[: k + 1]) <= 12]
)
few_factors = st.lists(st.one_of(reals, pairs), max_size=3)


@settings(deadline=None, derandomize=True, max_examples=40)
@given(few_factors, factor_lists)
def test_roots_survive_multiplying_out_and_factoring_again(zeros, poles):
    built = TransferFunction.from_factors(Fraction(-7, 3), zeros, poles)
    found = TransferFunction.from_polynomials(built.numerator, built.denominator)
    assert found.gain == Fraction(-7, 3)
    for mine, theirs in ((found.zeros, built.zeros), (found.poles, built.poles)):
        for root in theirs:
            assert min(abs(mine - root)) <= 1e-9 * abs(root)
        assert len(mine) == len(theirs)


@settings(deadline=None, derandomize=True, max_examples=40)
@given(few_factors, factor_lists, st.floats(-1, 7))
def test_the_response_by_factors_is_that_of_the_polynomials(zeros, poles, log_w):
    """Against polynomial evaluation with 50 digits."""
    built = TransferFunction.from_factors(Fraction(3), zeros, poles)
    found = TransferFunction.from_polynomials(built.numerator, built.denominator)
    w = 10**log_w
    with mpmath.workdps(50):
        values = [
            mpmath.polyval([mpmath.mpf(c.numerator) / c.denominator for c in p], mpmath.mpc(0, w))
            for p in (built.numerator, built.denominator)
        ]
        expected = complex(values[0] / values[1])
    assert complex(built.at(1j * w)) == pytest.approx(expected, rel=1e-12)
    assert complex(found.at(1j * w)) == pytest.approx(expected, rel=1e-12)


def _prototype(zeros_poles_gain) -> TransferFunction:
    zeros, poles, gain = zeros_poles_gain
    denominator = np.real(np.poly(poles))
    return TransferFunction.from_polynomials(
        [float(c) for c in gain * np.real(np.atleast_1d(np.poly(zeros)))],
        [float(c) for c in denominator],
    )


@pytest.mark.parametrize("order", range(1, 13))
def test_butterworth_poles_lie_on_the_unit_circle(order):
    """Against scipy.signal.buttap, and Q against the closed form: the poles of order n are
    exp(j pi (2k + n - 1) / 2n)."""
    target = _prototype(signal.buttap(order))
    for pole in signal.buttap(order)[1]:
        assert min(abs(target.poles - pole)) < 1e-11
    expected = [
        -1 / (2 * math.cos(math.pi * (2 * k + order - 1) / (2 * order)))
        for k in range(1, order // 2 + 1)
    ]
    found = [f.q for f in target.pole_factors if f.roots[0].imag]
    assert sorted(found) == pytest.approx(sorted(expected), rel=1e-10)


@pytest.mark.parametrize(
    ("denominator", "qs"),
    [
        ((1, 2, 2, 1), (1.0,)),
        ((1, 2.613126, 3.414214, 2.613126, 1), (0.541196, 1.306563)),
        ((1, 3.236068, 5.236068, 5.236068, 3.236068, 1), (0.618034, 1.618034)),
    ],
    ids=["3", "4", "5"],
)
def test_published_butterworth_polynomials_have_the_published_q(denominator, qs):
    """Zverev, Handbook of Filter Synthesis; Williams and Taylor, Electronic Filter Design
    Handbook (from memory)."""
    target = TransferFunction.from_polynomials([1], denominator)
    found = sorted(f.q for f in target.pole_factors if f.degree == 2)
    assert found == pytest.approx(qs, abs=2e-6)
    assert [f.natural_frequency for f in target.pole_factors] == pytest.approx(
        [1] * len(target.pole_factors), abs=2e-6
    )


@pytest.mark.parametrize(
    ("order", "ripple_db", "denominator"),
    [
        (2, 0.5, (1, 1.425625, 1.516203)),
        (3, 0.5, (1, 1.252913, 1.534895, 0.715694)),
        (2, 1, (1, 1.097734, 1.102510)),
        (2, 3, (1, 0.644900, 0.707948)),
    ],
)
def test_published_chebyshev_polynomials_have_the_poles_of_the_prototype(
    order, ripple_db, denominator
):
    """Zverev; Williams and Taylor (from memory), against scipy.signal.cheb1ap."""
    target = TransferFunction.from_polynomials([1], denominator)
    np.testing.assert_allclose(
        np.sort_complex(target.poles),
        np.sort_complex(signal.cheb1ap(order, ripple_db)[1]),
        atol=2e-6,
    )


@pytest.mark.parametrize(
    "denominator", [(1, 3, 3), (1, 6, 15, 15), (1, 10, 45, 105, 105)], ids=["2", "3", "4"]
)
def test_published_bessel_polynomials_have_the_poles_of_the_prototype(denominator):
    """Zverev; Williams and Taylor (from memory), against scipy.signal.besselap."""
    target = TransferFunction.from_polynomials([denominator[-1]], denominator)
    expected = signal.besselap(len(denominator) - 1, norm="delay")[1]
    np.testing.assert_allclose(np.sort_complex(target.poles), np.sort_complex(expected), rtol=1e-10)
    # A delay of 1 s at low frequency: the phase is -w.
    assert np.angle(complex(target.at(1e-3j))) == pytest.approx(-1e-3, rel=1e-9)


def test_repeated_and_mixed_factors_are_found_exactly():
    target = TransferFunction.from_polynomials(
        [2, 0], np.poly([-3, -3, -3, 0, 0]).astype(int).tolist()
    )
    assert target.factors_are_exact
    assert sorted(target.poles.real) == [-3, -3, -3, 0, 0]
    assert (target.poles_at_origin, target.zeros_at_origin, target.order) == (2, 1, 5)


def test_a_damped_pair_and_a_growing_one_lie_on_their_own_sides():
    assert all(r.real < 0 for r in Factor.pair(10, 5).roots)
    assert all(r.real > 0 for r in Factor.pair(-10, 5).roots)
    assert [r.real for r in Factor.pair(10, math.inf).roots] == [0, 0]
    assert (Factor.pair(10, 5).q, Factor.pair(-10, 5).q) == (5, -5)


def test_an_overdamped_pair_has_two_accurate_real_roots():
    """Their product is w0^2, and the small one loses no digits to the large one."""
    small, large = sorted(Factor.pair(1, Fraction(1, 10**9)).roots, key=abs)
    assert (small.imag, large.imag) == (0, 0)
    assert small.real == pytest.approx(-1e-9, rel=1e-15)
    assert large.real == pytest.approx(-1e9, rel=1e-15)


def test_a_gain_of_zero_is_refused():
    with pytest.raises(TargetError, match="got a gain of zero, expected a nonzero number"):
        TransferFunction.from_factors(0, [], [Factor.real(-1)])


@pytest.mark.parametrize(
    ("n", "d", "name"), [([0, 0], [1], "numerator"), ([1], [0], "denominator")]
)
def test_a_zero_polynomial_is_refused(n, d, name):
    with pytest.raises(TargetError, match=f"got a {name} that is zero"):
        TransferFunction.from_polynomials(n, d)


def test_negation_changes_the_sign_and_nothing_else():
    target = TransferFunction.from_polynomials([1, 2], [1, 3, 9])
    assert complex(target.negated().at(2j)) == -complex(target.at(2j))
    assert target.negated().pole_factors is target.pole_factors
