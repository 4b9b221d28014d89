"""The orthonormal ladder: its quotients, its Gramian, its zeros at both ends, its limits."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
import scipy.linalg
import scipy.signal

from synth.errors import RealizationError
from synth.forms import realize
from synth.graph import BlockGraph
from synth.polarity import choose_polarity
from synth.transfer import Factor, TransferFunction
from tests.strategies import butterworth

F = Fraction
KINDS = [(n, m, r) for n in range(1, 9) for m in range(n + 1) for r in range(n + 1 - m)]


def of_kind(order: int, low: int, high: int, rng: np.random.Generator) -> TransferFunction:
    """Rational factors within a decade, `low` zeros at the origin and `high` at infinity."""

    def near_one(least: float, most: float) -> F:
        return F(int(rng.integers(100 * least, 100 * most)), 100)

    poles = [Factor.pair(near_one(0.5, 2), near_one(0.6, 3)) for _ in range(order // 2)]
    poles += [Factor.real(-near_one(0.5, 2))] * (order % 2)
    zeros = [Factor.real(near_one(-3, 3) + F(1, 200)) for _ in range(order - low - high)]
    return TransferFunction.from_factors(2, [Factor.real(0)] * low + zeros, poles)


def gramian(graph: BlockGraph) -> np.ndarray:
    """K of A K + K A^T + B B^T = 0."""
    A, B, _, _ = (np.array(m, float) for m in graph.state_matrices())
    return np.asarray(scipy.linalg.solve_continuous_lyapunov(A, -np.outer(B, B)))


def test_butterworth_of_third_order_has_the_known_alphas() -> None:
    """alpha = 2, 1.5, 0.5 (Johns, Snelgrove and Sedra 1989, from memory).  Scaled by their
    square roots A is skew but for -alpha_1, and with b = sqrt(2 alpha_1) the Gramian is I."""
    graph = realize(TransferFunction.from_polynomials([1], [1, 2, 2, 1]), "schwarz")
    A, B, _, _ = graph.state_matrices()
    assert all(A[i][j] == 0 for i in range(3) for j in range(3) if abs(i - j) > 1)
    alpha = [-A[0][0], -A[0][1] * A[1][0], -A[1][2] * A[2][1]]
    assert alpha == [2, F(3, 2), F(1, 2)]
    assert (A[1][1], A[2][2], B[1], B[2]) == (0, 0, 0, 0)
    a1, a2, a3 = np.sqrt(np.array(alpha, float))
    scaled = np.array([[-(a1**2), -a2, 0], [a2, 0, -a3], [0, a3, 0]])
    b = np.array([np.sqrt(2) * a1, 0, 0])
    K = scipy.linalg.solve_continuous_lyapunov(scaled, -np.outer(b, b))
    np.testing.assert_allclose(K, np.eye(3), atol=1e-12)


@pytest.mark.parametrize(("order", "low", "high"), KINDS)
def test_states_are_orthogonal_and_zeros_at_both_ends_structural(
    order: int, low: int, high: int
) -> None:
    """Whatever the zeros, the Gramian is diagonal.  With every weight off by up to 1 % the
    response far below and far above still falls as H(s) does: its error is the same at
    frequencies a hundredfold apart."""
    rng = np.random.default_rng(100 * order + 10 * low + high)
    target = of_kind(order, low, high, rng)
    graph = realize(target, "schwarz")
    K = gramian(graph)
    size = np.sqrt(np.diag(K))
    np.testing.assert_allclose(K / np.outer(size, size), np.eye(order), atol=1e-8)
    off = replace(
        graph,
        blocks=tuple(
            replace(
                b,
                terms=tuple(
                    replace(t, weight=float(t.weight) * (1 + rng.uniform(-0.01, 0.01)))
                    for t in b.terms
                ),
            )
            for b in graph.blocks
        ),
    )
    for far in (np.array([1e-8j, 1e-6j]), np.array([1e6j, 1e8j])):
        ratio = off.at(far) / target.at(far)
        assert ratio[0] == pytest.approx(ratio[1], rel=1e-2)


@pytest.mark.parametrize(
    ("order", "low", "adders"),
    [(1, 0, 0), (5, 0, 0), (8, 0, 0), (2, 1, 0), (6, 3, 0), (5, 2, 0), (4, 4, 3), (3, 3, 2)],
)
def test_a_single_power_of_s_is_read_off_one_signal(order: int, low: int, adders: int) -> None:
    """Low-passes and band-passes have no adder; high-passes have them, but none to sum the
    output."""
    poles = [Factor.pair(F(k + 2, 2), F(3, 2)) for k in range(order // 2)]
    poles += [Factor.real(F(-1))] * (order % 2)
    target = TransferFunction.from_factors(-3, [Factor.real(0)] * low, poles)
    graph = realize(target, "schwarz")
    assert len(graph.integrators) == order
    assert len(graph.adders) == adders
    assert graph.output != "y"


def test_an_integrator_chain_needs_an_inverter_for_every_second_state() -> None:
    """Each pair of neighbours is a loop with one inversion to find; neighbours share it."""
    for order in range(2, 9):
        graph = realize(butterworth(order, 1e3), "schwarz")
        assert len(choose_polarity(graph, inverted="either").inverters) == order // 2


@pytest.mark.parametrize(
    ("numerator", "denominator"),
    [
        ([3, 2], [1, 0]),
        ([5, 3, 2], [1, 0, 0]),
        ([2, 1], [1, 4, 0, 0]),
        ([1, 3], [1, 2, 7, 0]),
        ([1], [1, 0, 0, 0]),
        ([1, 0], [1, 0, 4]),
        ([1, 2], [1, 0, 4]),
        ([1, 0, 0], [1, 1, 4, 4]),
        ([1, 0, 1], [1, 1, 4, 4]),
        ([3, 0, 0, 0, 0], [1, 3, 6, 12, 8]),
        ([1, 5], [1, 0, 5, 0, 4]),
        ([1, 5], [1, 0, 8, 0, 16]),
        ([1, 5], [1, 0, 4, 0, 0]),
        ([1, 5], [1, -2, 5]),
        ([1, 5], [1, 0, -1]),
        ([1, 1, 0], [1, -1, 3, 2]),
    ],
)
def test_poles_on_the_axis_and_right_of_it_are_realised(
    numerator: list[int], denominator: list[int]
) -> None:
    """Poles at the origin, pairs on the axis, repeated ones too, and poles in the right
    half-plane: the response is that of scipy."""
    graph = realize(TransferFunction.from_polynomials(numerator, denominator), "schwarz")
    w = np.geomspace(0.013, 130, 31)
    _, wanted = scipy.signal.freqs(numerator, denominator, w)
    np.testing.assert_allclose(graph.at(1j * w), wanted, rtol=1e-10)


@pytest.mark.parametrize("denominator", [[1, 0, 0, -1], [1, 1, 1, 1, 1], [1, 0, 2, 0, 1, 1]])
def test_a_quotient_of_zero_is_refused_with_the_reason(denominator: list[int]) -> None:
    """Only poles in the right half-plane make one."""
    target = TransferFunction.from_polynomials([1], denominator)
    assert np.any(target.poles.real > 0)
    with pytest.raises(RealizationError, match="poles in the right half-plane make a quotient"):
        realize(target, "schwarz")
