"""Every form gives its target back, exactly and in numbers, with zeros made by the structure."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import control
import numpy as np
import pytest
import scipy.signal
import sympy
from hypothesis import given, settings

from synth.errors import JobError, RealizationError
from synth.forms import FORMS, realize
from synth.graph import BlockGraph
from synth.transfer import Factor, TransferFunction
from tests.forms import exists, realized, sizes_of_response
from tests.strategies import butterworth, random_target, targets

F = Fraction


def rational_target(order: int) -> TransferFunction:
    """A target whose factors are rational, with pairs, real roots and zeros of every kind."""
    poles = [
        Factor.real(F(-3, 2)),
        Factor.pair(F(5), F(5, 4)),
        Factor.real(F(-7)),
        Factor.pair(F(11, 3), F(9)),
    ]
    zeros = [Factor.real(F(2)), Factor.pair(F(13, 2), F(10, 3)), Factor.real(F(0))]
    picked: list[Factor] = []
    for factor in poles:
        if sum(p.degree for p in picked) + factor.degree <= order:
            picked.append(factor)
    while sum(p.degree for p in picked) < order:
        picked.append(Factor.real(F(-17)))
    kept: list[Factor] = []
    for factor in zeros:
        if sum(z.degree for z in kept) + factor.degree <= order:
            kept.append(factor)
    return TransferFunction.from_factors(F(7, 3), kept, picked)


def error_of(graph: BlockGraph, target: TransferFunction, s: np.ndarray) -> np.ndarray:
    """|graph - H| relative to |H|, or where zeros come from sums that cancel relative to the
    largest summand of any adder as it arrives at the output, as rounding leaves it."""
    wanted = target.at(s)
    size = sizes_of_response(graph, wanted, s)
    size = np.where(size > 0, size, 1.0)
    return np.asarray(np.abs(graph.at(s) - wanted) / size)


def exact_transfer_function(graph: BlockGraph) -> sympy.Expr:
    """D + C (sI - A)^-1 B in exact rationals, by C adj(sI-A) B = det(sI-A+BC) - det(sI-A)."""
    s = sympy.Symbol("s")

    def exact(value: object) -> sympy.Rational:
        fraction = F(value)  # type: ignore[arg-type]
        return sympy.Rational(fraction.numerator, fraction.denominator)

    rows, column, row, direct = graph.state_matrices()
    A = sympy.Matrix([[exact(v) for v in r] for r in rows])
    B = sympy.Matrix([exact(v) for v in column])
    C = sympy.Matrix([[exact(v) for v in row]])
    p = A.charpoly(s).as_expr()
    q = (A - B * C).charpoly(s).as_expr()
    return exact(direct) + (q - p) / p


@pytest.mark.parametrize("form", [name for name, form in FORMS.items() if form.exact])
@pytest.mark.parametrize("order", range(1, 7))
def test_graph_is_the_target_in_exact_rationals(form: str, order: int) -> None:
    """The rational function of the graph equals H(s) identically."""
    target = rational_target(order)
    s = sympy.Symbol("s")
    num = sum(
        sympy.Rational(c.numerator, c.denominator) * s**k
        for k, c in enumerate(reversed(target.numerator))
    )
    den = sum(
        sympy.Rational(c.numerator, c.denominator) * s**k
        for k, c in enumerate(reversed(target.denominator))
    )
    difference = sympy.cancel(exact_transfer_function(realized(target, form)) - num / den)
    assert difference == 0


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("order", range(1, 13))
def test_graph_is_the_target_in_numbers_over_six_decades(form: str, order: int) -> None:
    """Relative error below 1e-9 at every frequency from below the lowest to above the highest
    root, though the signals inside differ by tens of decades."""
    rng = np.random.default_rng(order)
    s = 2j * np.pi * np.geomspace(0.01, 1e7, 150)
    for target in [random_target(rng, order) for _ in range(3 if order <= 8 else 2)]:
        if exists(form, target):
            assert np.max(error_of(realize(target, form), target, s)) < 1e-9


@settings(deadline=None, derandomize=True, max_examples=60)
@given(targets())
def test_random_stable_targets_come_back_from_every_form(target: TransferFunction) -> None:
    """Orders 1 to 8: the graph gives H(s) back, at real and complex frequencies."""
    s = np.array([1j, 30j, 1e3j, 2e4j, 100 + 500j, 3e3])
    for name, form in FORMS.items():
        try:
            graph = realize(target, name)
        except RealizationError:
            assert not form.everywhere
            continue
        assert np.max(error_of(graph, target, s)) < 1e-9


def test_controllable_form_of_third_order_has_the_matrices_of_the_textbook() -> None:
    """Common practice: three integrators; the last row of A holds -a0, -a1, -a2, B is the last
    unit vector, C holds b0, b1, b2, D = 0, and C (sI - A)^-1 B + D gives H(s) back."""
    a2, a1, a0 = 6, 11, 7
    b2, b1, b0 = 2, 5, 3
    target = TransferFunction.from_polynomials([b2, b1, b0], [1, a2, a1, a0])
    graph = realize(target, "controllable")
    assert len(graph.integrators) == 3
    A, B, C, D = graph.state_matrices()
    order = [[b.name for b in graph.integrators].index(n) for n in ("x1", "x2", "x3")]
    A = [[A[i][j] for j in order] for i in order]
    last_row = [-a0, -a1, -a2]
    assert A[:2] == [[0, 1, 0], [0, 0, 1]]
    assert A[2] == last_row
    assert [B[i] for i in order] == [0, 0, 1]
    assert [C[i] for i in order] == [b0, b1, b2]
    assert D == 0
    s = 0.3 + 1.7j
    value = np.array(C, float) @ np.linalg.solve(
        s * np.eye(3) - np.array(graph.state_matrices()[0], float), np.array(B, float)
    )
    assert value == pytest.approx((b2 * s**2 + b1 * s + b0) / (s**3 + a2 * s**2 + a1 * s + a0))


@pytest.mark.parametrize(
    ("form", "kind"), [("controllable", "reachable"), ("observable", "observable")]
)
def test_companion_matrices_agree_with_python_control(form: str, kind: str) -> None:
    """The state matrices are those of python-control's canonical form, up to the order of the
    states: same coefficients, same response."""
    num, den = [3.0, 2.0, 7.0], [1.0, 4.0, 9.0, 5.0]
    graph = realize(TransferFunction.from_polynomials(num, den), form)
    system, _ = control.canonical_form(control.ss(control.tf(num, den)), kind)
    A, B, C, D = (np.array(m, float) for m in graph.state_matrices())
    entries = np.sort(np.round(np.abs(A[A != 0]), 9))
    theirs = np.asarray(system.A)
    np.testing.assert_allclose(entries, np.sort(np.abs(theirs[np.abs(theirs) > 1e-9])), rtol=1e-7)
    s = 1j * np.geomspace(0.1, 10, 7)
    ours = [C @ np.linalg.solve(x * np.eye(3) - A, B) + D for x in s]
    np.testing.assert_allclose(ours, system(s), rtol=1e-9)


@pytest.mark.parametrize("form", FORMS)
def test_response_agrees_with_scipy_state_space(form: str) -> None:
    """scipy.signal.tf2ss of the same coefficients has the same frequency response."""
    num, den = [1.0, 3.0, 2.0, 8.0], [2.0, 5.0, 9.0, 4.0]
    graph = realized(TransferFunction.from_polynomials(num, den), form)
    A, B, C, D = scipy.signal.tf2ss(num, den)
    w = np.geomspace(0.05, 50, 40)
    _, theirs = scipy.signal.freqresp(scipy.signal.StateSpace(A, B, C, D), w)
    np.testing.assert_allclose(graph.at(1j * w), theirs, rtol=1e-9)


@pytest.mark.parametrize("form", [n for n, form in FORMS.items() if form.structural_zeros])
def test_zeros_at_the_origin_come_from_the_structure(form: str) -> None:
    """With every weight off by up to 2 %, a fourth-order high-pass still falls by 80 dB a
    decade three decades below its corner: no small difference of large terms is involved."""
    target = butterworth(4, 1e3, highpass=True)
    graph = realized(target, form)
    rng = np.random.default_rng(3)
    blocks = tuple(
        replace(
            b,
            terms=tuple(
                replace(t, weight=float(t.weight) * (1 + rng.uniform(-0.02, 0.02))) for t in b.terms
            ),
        )
        for b in graph.blocks
    )
    off = replace(graph, blocks=blocks)
    s = 2j * np.pi * np.array([1.0, 10.0])
    error_db = 20 * np.log10(np.abs(off.at(s) / target.at(s)))
    assert np.max(np.abs(error_db)) < 2.0


@pytest.mark.parametrize("form", ["controllable", "observable", "cascade"])
def test_no_adder_where_an_integrator_is_the_output(form: str) -> None:
    """A low-pass has as many blocks as poles: its output is an integrator."""
    graph = realize(butterworth(4, 1e3), form)
    assert len(graph.blocks) == 4
    assert graph.by_name[graph.output].is_integrator


def test_unknown_form_names_those_that_exist() -> None:
    """The message lists the forms."""
    with pytest.raises(JobError, match=r"board.form: got 'diagonal', expected auto, controllable"):
        realize(butterworth(2, 1.0), "diagonal")
