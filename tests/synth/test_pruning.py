"""Pruning keeps the response, takes away what does not matter and nothing that does."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from synth.errors import NumericalError
from synth.pruning import Wanted, pruned, turned
from synth.statespace import StateSpace

S = 1j * np.concatenate([[0.0], np.geomspace(0.01, 100, 30)])


def system(A: list[list[float]], B: list[float], C: list[float], D: float = 0.0) -> StateSpace:
    return StateSpace(np.array(A), np.array(B), np.array([C]), np.array([D]))


def response(of: StateSpace, s: np.ndarray = S) -> np.ndarray:
    """C (sI - A)^-1 B + D, one frequency after another."""
    x = [np.linalg.solve(v * np.eye(of.order) - of.A, of.B) for v in s]
    return np.array(x) @ of.C[0] + of.D[0]


def coefficients(of: StateSpace) -> int:
    return sum(int(np.count_nonzero(m)) for m in (of.A, of.B, of.C))


# Two lossy integrators side by side, each of use, with equal Gramians.
MODAL = system([[-1.0, 0.0], [0.0, -10.0]], [1.0, 3.0], [1.0, 3.0], 0.5)


def wanted_of(of: StateSpace) -> Wanted:
    return Wanted.of(of, S, response(of))


def test_coefficients_without_effect_go_and_the_rest_stays() -> None:
    """Small couplings added to two separate states, and the response of the two without: all
    of them go, the others are corrected back, D stays."""
    rng = np.random.default_rng(0)
    off = np.array([[0.0, 1e-3], [-2e-3, 0.0]])
    near = replace(MODAL, A=MODAL.A + off, B=MODAL.B * (1 + 1e-3 * rng.normal(size=2)))
    found = pruned(near, wanted_of(MODAL))
    assert np.count_nonzero(found.A) == 2
    np.testing.assert_allclose(np.diag(found.A), [-1.0, -10.0], rtol=1e-9)
    np.testing.assert_allclose(found.B * found.C[0], [1.0, 9.0], rtol=1e-9)
    assert found.D[0] == 0.5


def test_the_response_is_kept_while_coefficients_go() -> None:
    """A full matrix of order 4, close to 1e-12 and sparser, with every stated zero still one."""
    rng = np.random.default_rng(2)
    A = -np.diag([1.0, 2.0, 4.0, 8.0]) + 0.3 * rng.normal(size=(4, 4))
    A[0, 3] = 0.0
    full = StateSpace(A, rng.normal(size=4), rng.normal(size=(1, 4)), np.array([0.2]))
    found = pruned(full, wanted_of(full))
    assert wanted_of(full).error(found) < 1e-12
    assert coefficients(found) < coefficients(full)
    assert found.A[0, 3] == 0.0
    fine = 1j * np.geomspace(1e-3, 1e3, 200)
    np.testing.assert_allclose(response(found, fine), response(full, fine), rtol=1e-10)


def test_nothing_goes_that_is_needed() -> None:
    """Two separate states have 3 n coefficients but two levels that are free: all are needed."""
    found = pruned(MODAL, wanted_of(MODAL))
    assert coefficients(found) == coefficients(MODAL)


def test_a_response_that_is_another_one_is_refused() -> None:
    other = replace(MODAL, A=MODAL.A * 40)
    with pytest.raises(NumericalError, match=r"misses its response by .* does not converge"):
        pruned(MODAL, wanted_of(other))


def test_turning_two_states_finds_the_coordinates_in_which_they_are_apart() -> None:
    """Rotated by half a radian and turned back: no couplings, response unchanged."""
    c, s = np.cos(0.5), np.sin(0.5)
    R = np.array([[c, -s], [s, c]])
    mixed = StateSpace(R.T @ MODAL.A @ R, R.T @ MODAL.B, MODAL.C @ R, MODAL.D)
    found = turned(mixed, wanted_of(mixed), [(0, 1)])
    np.testing.assert_allclose(response(found), response(MODAL), rtol=1e-12)
    # The grid of angles is 3 degrees wide.
    coupling = np.abs(found.A[0, 1])
    assert coupling < np.sin(np.radians(3)) * 9
    assert np.abs(mixed.A[0, 1]) > 3
