"""The parallel form: partial fractions against scipy and sympy, and what its sections are."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
import scipy.signal
import sympy
from hypothesis import given, settings
from hypothesis import strategies as st

from synth import polynomials
from synth.forms.parallel import parallel, partial_fractions
from synth.graph import BlockGraph
from synth.transfer import Factor, TransferFunction
from tests.strategies import butterworth

F = Fraction

REPEATED = [Factor.pair(F(3), F(2))] * 3 + [Factor.real(F(-2))] * 2 + [Factor.real(F(0))] * 2


def wiring(graph: BlockGraph) -> dict[str, list[str]]:
    """What every block reads."""
    return {b.name: [t.source for t in b.terms] for b in graph.blocks}


def rational(graph: BlockGraph) -> tuple[sympy.Expr, sympy.Symbol]:
    """H(s) of the graph in exact rationals, by elimination of its signals one after another."""
    s = sympy.Symbol("s")
    signals = {b.name: sympy.Symbol(b.name) for b in graph.blocks}
    equations = []
    for block in graph.blocks:
        total = sum(
            sympy.Rational(F(t.weight).numerator, F(t.weight).denominator)
            * signals.get(t.source, sympy.Integer(1))
            for t in block.terms
        )
        equations.append((s if block.is_integrator else 1) * signals[block.name] - total)
    found = sympy.solve(equations, list(signals.values()), dict=True)[0]
    return sympy.cancel(found[signals[graph.output]]), s


def expected(target: TransferFunction, s: sympy.Symbol) -> sympy.Expr:
    def polynomial(coefficients: tuple[F, ...]) -> sympy.Expr:
        pairs = enumerate(reversed(coefficients))
        return sum(sympy.Rational(c.numerator, c.denominator) * s**k for k, c in pairs)

    return sympy.cancel(polynomial(target.numerator) / polynomial(target.denominator))


@settings(deadline=None, derandomize=True, max_examples=40)
@given(
    st.lists(st.integers(-9, 9), min_size=1, max_size=6),
    st.sets(st.integers(-9, 9), min_size=1, max_size=4),
    st.data(),
)
def test_partial_fractions_add_up(numerator: list[int], roots: set[int], data: st.DataObject):
    """Polynomial part and all fractions over one denominator are the numerator again, and the
    residues of simple poles are those of scipy."""
    factors = [((F(1), F(-r)), data.draw(st.integers(1, 3))) for r in sorted(roots)]
    top = polynomials.trimmed([F(c) for c in numerator])
    bottom = polynomials.product(f for f, m in factors for _ in range(m))
    quotient, _ = polynomials.divide(top, bottom)
    rest = polynomials.subtract(top, polynomials.multiply(quotient, bottom))
    for (factor, m), residues in zip(factors, partial_fractions(top, factors), strict=True):
        assert len(residues) == m
        for power, residue in enumerate(residues, start=1):
            assert len(residue) < len(factor)
            over, nothing = polynomials.divide(bottom, polynomials.product([factor] * power))
            assert nothing == ()
            rest = polynomials.subtract(rest, polynomials.multiply(residue, over))
    assert rest == ()
    if top and all(m == 1 for _, m in factors):
        found, poles, _ = scipy.signal.residue([float(c) for c in top], [float(c) for c in bottom])
        theirs = dict(zip(np.round(poles.real).astype(int), found.real, strict=True))
        for (factor, _), (residue,) in zip(factors, partial_fractions(top, factors), strict=True):
            mine = float(residue[0]) if residue else 0.0
            assert mine == pytest.approx(theirs[int(-factor[1])], rel=1e-6, abs=1e-6)


@pytest.mark.parametrize(
    ("zeros", "poles"),
    [
        ([Factor.real(F(-1))] * 3, REPEATED),
        ([Factor.pair(F(2), F(5))] * 5, [*REPEATED, Factor.real(F(-5))]),
        # A pair with rational real roots, one of which is a pole of its own, too.
        ([Factor.real(F(3))], [Factor((F(1), F(6), F(5))), Factor.real(F(-1))]),
        # A double root given as a pair, and a pair of irrational real roots.
        ([], [Factor((F(1), F(4), F(4))), Factor((F(1), F(4), F(1)))]),
        # Pairs on the axis, twice.
        ([Factor.real(F(-1))], [Factor((F(1), F(0), F(4)))] * 2),
    ],
)
def test_repeated_and_related_poles_come_back_exactly(
    zeros: list[Factor], poles: list[Factor]
) -> None:
    """The graph is H(s) identically, as many integrators as poles."""
    target = TransferFunction.from_factors(F(7, 3), zeros, poles)
    graph = parallel(target)
    found, s = rational(graph)
    assert sympy.cancel(found - expected(target, s)) == 0
    assert len(graph.integrators) == target.order


def test_repeated_poles_are_a_chain_and_others_stand_side_by_side() -> None:
    """A double real pole, a pole at the origin and a pair with a direct term."""
    poles = [Factor.real(F(-2))] * 2 + [Factor.real(F(0)), Factor.pair(F(5), F(3))]
    target = TransferFunction.from_factors(F(3), [Factor.real(F(-1))] * 5, poles)
    assert wiring(parallel(target)) == {
        "x1": ["in", "x1"],
        "x2": ["x1", "x2"],
        "x3": ["in"],
        "x4": ["in", "x4", "x5"],
        "x5": ["x4"],
        "y": ["x1", "x2", "x3", "x4", "x5", "in"],
    }


def test_numerator_is_exact_where_the_factors_are_not() -> None:
    """Poles of a polynomial with irrational roots are doubles; the residues over them still add
    up to the given numerator exactly."""
    target = TransferFunction.from_polynomials([2, 3, 5], [1, 7, 11, 13, 4])
    assert not target.factors_are_exact
    found, s = rational(parallel(target))
    numerator, denominator = sympy.fraction(found)
    lead = sympy.Poly(denominator, s).LC()
    assert [c / lead for c in sympy.Poly(numerator, s).all_coeffs()] == [2, 3, 5]
    given = [float(c / lead) for c in sympy.Poly(denominator, s).all_coeffs()]
    np.testing.assert_allclose(given, [1, 7, 11, 13, 4], rtol=1e-14)


def test_a_tap_that_is_only_rounding_is_left_out() -> None:
    """Butterworth of order 3, from doubles: 1/(s+1) - s/(s^2+s+1), no tap at the second
    integrator of the pair."""
    graph = parallel(butterworth(3, 1e3))
    assert wiring(graph)["y"] == ["x1", "x3"]
    assert wiring(graph)["x2"] == ["x1"]


def test_a_small_tap_is_made_large_by_other_coordinates() -> None:
    """Q of 1.000001 instead: c0 is not nothing, but no resistor could carry it; the damping
    moves to the second integrator and the graph stays H(s) exactly."""
    poles = [Factor.real(F(-1)), Factor.pair(F(1), F(1000001, 1000000))]
    target = TransferFunction.from_factors(1, [], poles)
    graph = parallel(target)
    assert wiring(graph)["x3"] == ["x2", "x3"]
    weights = [abs(float(t.weight)) for t in graph.by_name["y"].terms]
    assert min(weights) > 0.9
    found, s = rational(graph)
    assert sympy.cancel(found - expected(target, s)) == 0


def test_a_single_pair_needs_no_adder() -> None:
    """A low-pass of order 2 is its own section."""
    assert [b.kind for b in parallel(butterworth(2, 1e3)).blocks] == ["integrator"] * 2


def test_a_pole_that_is_cancelled_has_no_section() -> None:
    """(s+1)/((s+1)(s+2)) is one lossy integrator."""
    poles = [Factor.real(F(-1)), Factor.real(F(-2))]
    graph = parallel(TransferFunction.from_factors(1, [Factor.real(F(-1))], poles))
    assert wiring(graph) == {"x1": ["in", "x1"]}
