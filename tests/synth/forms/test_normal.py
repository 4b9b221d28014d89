"""Sections of least noise: the noise gain that no realization falls below, exactly H(s)."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
import scipy.signal
from scipy.linalg import solve_continuous_lyapunov

from synth.forms import realize
from synth.forms.sectionwise import rational_root
from synth.transfer import Factor, TransferFunction

F = Fraction

PAIR = Factor.pair(F(40), F(6))
SECTIONS = {
    "low-pass": ([], [PAIR]),
    "band-pass": ([Factor.real(F(0))], [PAIR]),
    "high-pass": ([Factor.real(F(0))] * 2, [PAIR]),
    "notch": ([Factor.pair(F(30), math.inf)], [PAIR]),
    "all-pass": ([Factor.pair(F(40), F(-6))], [PAIR]),
    "one zero": ([Factor.real(F(-25))], [PAIR]),
    "real poles, residues of either sign": ([], [Factor.pair(F(10), F(10, 29))]),
    "real poles, residues of one sign": ([Factor.real(F(-8))], [Factor.pair(F(10), F(10, 29))]),
    "real poles, pair of zeros": (
        [Factor.pair(F(9), F(2))],
        [Factor.real(F(-3)), Factor.real(F(-20))],
    ),
    "double pole": ([Factor.pair(F(9), F(2))], [Factor.real(F(-5))] * 2),
}


def gramians(A, B, C, D) -> tuple[np.ndarray, np.ndarray]:
    """K and W: A K + K A^T + B B^T = 0, A^T W + W A + C^T C = 0."""
    A, B, C = np.array(A, float), np.array(B, float).reshape(-1, 1), np.array([C], float)
    C = C.reshape(1, -1)
    return (
        solve_continuous_lyapunov(A, -B @ B.T),
        solve_continuous_lyapunov(A.T, -C.T @ C),
    )


def section(name: str) -> TransferFunction:
    """A target that the form makes one section of."""
    zeros, poles = SECTIONS[name]
    return TransferFunction.from_factors(F(5), zeros, poles)


@pytest.mark.parametrize("name", SECTIONS)
def test_a_section_has_the_least_noise_there_is(name: str) -> None:
    """sum sqrt(K_ii W_ii) is at least the sum of the Hankel singular values, equal at best (Mullis
    and Roberts 1976, from memory), here those of scipy's companion matrices; where the poles are
    not taken apart both states have the same share."""
    target = section(name)
    graph = realize(target, "normal")
    K, W = gramians(*graph.state_matrices())
    reached = np.sqrt(np.diag(K) * np.diag(W))
    K, W = gramians(
        *scipy.signal.tf2ss(
            [float(c) for c in target.numerator], [float(c) for c in target.denominator]
        )
    )
    least = np.sum(np.sqrt(np.linalg.eigvals(K @ W).real))
    assert np.sum(reached) == pytest.approx(least, rel=1e-9)
    if "one sign" not in name:
        assert reached[0] == pytest.approx(reached[1], rel=1e-9)


def test_other_forms_are_noisier() -> None:
    """The bound is no formality: the companion forms of two real poles are above it."""
    sums = {}
    for form in ("controllable", "observable", "normal"):
        K, W = gramians(
            *realize(section("real poles, residues of one sign"), form).state_matrices()
        )
        sums[form] = float(np.sum(np.sqrt(np.diag(K) * np.diag(W))))
    assert sums["controllable"] > 1.05 * sums["normal"]
    assert sums["observable"] > 1.05 * sums["normal"]


@pytest.mark.parametrize("name", SECTIONS)
def test_the_poles_are_exact_though_the_rotation_is_rational(name: str) -> None:
    """-trace A = a1 and det A = a0 as rationals, for every section; H(s) within rounding."""
    target = section(name)
    graph = realize(target, "normal")
    s = np.array([2j, 40j, 3.0 + 7j])
    np.testing.assert_allclose(graph.at(s), target.at(s), rtol=1e-12)
    A, _, _, _ = graph.state_matrices()
    (a, b), (c, d) = A
    assert (1, -(a + d), a * d - b * c) == target.denominator


def test_a_pair_turns_as_a_normal_matrix() -> None:
    """A A^T = A^T A to rounding, for complex poles."""
    A = np.array(realize(section("band-pass"), "normal").state_matrices()[0], dtype=float)
    np.testing.assert_allclose(A @ A.T, A.T @ A, rtol=1e-12, atol=1e-9)


def test_roots_that_are_rational_are_exact() -> None:
    """9/4 has one, 2 does not."""
    assert rational_root(F(9, 4)) == F(3, 2)
    assert float(rational_root(F(2))) == math.sqrt(2)
