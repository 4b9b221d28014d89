"""Block graphs refuse contradictions, and solve their signals accurately."""

from __future__ import annotations

from fractions import Fraction

import mpmath
import numpy as np
import pytest

from synth.errors import GraphError
from synth.forms import realize
from synth.graph import Block, BlockGraph, Term, merged_terms
from tests.strategies import butterworth


def lossy(weight: Fraction | float = Fraction(-3)) -> BlockGraph:
    """x' = 6 u + weight x, y = 2 x + u."""
    x = Block("x1", "integrator", (Term("in", Fraction(6)), Term("x1", weight)))
    y = Block("y", "adder", (Term("x1", Fraction(2)), Term("in", Fraction(1))))
    return BlockGraph("test", (x, y), "y")


def test_state_matrices_are_exact() -> None:
    """Adders are substituted, rationals stay rationals."""
    A, B, C, D = lossy().state_matrices()
    assert (A, B, C, D) == ([[-3]], [6], [2], 1)
    assert all(isinstance(v, Fraction) for v in (A[0][0], B[0], C[0], D))


def test_signals_and_injections_agree_with_hand_calculation() -> None:
    """x/u = 6/(s+3); y = 2x + u; a disturbance of x reaches y by 2 s/(s+3)."""
    s = np.array([1j, 5 + 2j, 100j])
    signals = lossy().signals(s)
    np.testing.assert_allclose(signals["x1"], 6 / (s + 3), rtol=1e-13)
    np.testing.assert_allclose(signals["y"], 12 / (s + 3) + 1, rtol=1e-13)
    injections = lossy().injections(s)
    np.testing.assert_allclose(injections["x1"], 2 * s / (s + 3), rtol=1e-13)
    np.testing.assert_allclose(injections["y"], np.ones(3), rtol=1e-13)


def test_rescaling_keeps_the_response_and_moves_the_signal() -> None:
    """Twice the level of x doubles x and leaves y."""
    s = np.array([0.1j, 7j])
    scaled = lossy().rescaled({"x1": 2.0})
    np.testing.assert_allclose(scaled.at(s), lossy().at(s), rtol=1e-13)
    np.testing.assert_allclose(scaled.signals(s)["x1"], 2 * lossy().signals(s)["x1"], rtol=1e-13)


def test_merged_terms_add_up_and_vanish() -> None:
    """Two terms of one source become one; a sum of zero disappears."""
    terms = merged_terms([Term("in", 2.0), Term("x1", 1.0), Term("in", 3.0), Term("x1", -1.0)])
    assert [(t.source, t.weight) for t in terms] == [("in", 5.0)]


@pytest.mark.parametrize(
    ("blocks", "output", "message"),
    [
        ([("x1", "integrator", "x9")], "x1", "unknown source 'x9'"),
        ([("x1", "integrator", "in")], "y", "unknown output 'y'"),
        ([("a", "adder", "b"), ("b", "adder", "a")], "a", "feed each other in a loop"),
        ([("x1", "integrator", "in"), ("x1", "adder", "in")], "x1", "used twice"),
        ([("in", "integrator", "x1")], "in", "got the block name 'in'"),
        ([("x1", "gyrator", "in")], "x1", "got kind 'gyrator'"),
    ],
)
def test_contradictions_are_refused(
    blocks: list[tuple[str, str, str]], output: str, message: str
) -> None:
    """Each with its reason."""
    with pytest.raises(GraphError, match=message):
        BlockGraph("test", tuple(Block(n, k, (Term(s, 1.0),)) for n, k, s in blocks), output)


def test_zero_weight_and_empty_blocks_are_refused() -> None:
    """They would be parts of infinite value."""
    with pytest.raises(GraphError, match="weight zero"):
        Block("x1", "integrator", (Term("in", 0.0),))
    with pytest.raises(GraphError, match="no input"):
        Block("x1", "integrator", ())
    with pytest.raises(GraphError, match="one source twice"):
        Block("x1", "integrator", (Term("in", 1.0), Term("in", 2.0)))


@pytest.mark.parametrize("form", ["controllable", "observable"])
def test_small_injections_are_as_accurate_as_large_ones(form: str) -> None:
    """A high-pass of order 8 seven decades below its corner: what a disturbance of each block
    does to the output spans dozens of decades; against a solution in 120 digits."""
    graph = realize(butterworth(8, 1e3, highpass=True), form)
    names = [b.name for b in graph.blocks]
    f = np.array([1e-4, 1.0, 3e3])
    found = graph.injections(2j * np.pi * f)
    with mpmath.workdps(120):
        for k, hertz in enumerate(f):
            s = mpmath.mpc(0, float(2 * np.pi * hertz))
            matrix = mpmath.zeros(len(names))
            for row, block in enumerate(graph.blocks):
                matrix[row, row] = s if block.is_integrator else 1
                for term in block.terms:
                    if term.source in names:
                        matrix[row, names.index(term.source)] -= mpmath.mpf(float(term.weight))
            unit = mpmath.zeros(len(names), 1)
            unit[names.index(graph.output)] = 1
            adjoint = mpmath.lu_solve(matrix.T, unit)
            for row, block in enumerate(graph.blocks):
                expected = complex(adjoint[row] * (s if block.is_integrator else 1))
                assert found[block.name][k] == pytest.approx(expected, rel=1e-10)


def test_only_adders_take_terms_of_both_signs() -> None:
    """An integrator that differences would need equal capacitors."""
    with pytest.raises(GraphError, match="block x1: got an integrator with terms of both signs"):
        Block("x1", "integrator", (Term("in", 1.0),), both_signs=True)
