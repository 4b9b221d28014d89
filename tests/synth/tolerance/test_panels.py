"""Polynomials on panels, against the functions they stand for."""

import numpy as np
import pytest

from synth.tolerance.panels import DEGREE, Panels

EDGES = np.array([-2.0, -0.5, 0.0, 1.2, 4.0])
X = np.linspace(-2.0, 4.0, 301)


def polynomials(x, seed=3):
    """Some complex polynomials of degree `DEGREE`, one a row."""
    generator = np.random.default_rng(seed)
    shape = (5, DEGREE + 1)
    coefficients = generator.normal(size=shape) + 1j * generator.normal(size=shape)
    return np.array([np.polynomial.chebyshev.chebval(x / 4, c) for c in coefficients])


def test_polynomials_are_followed_exactly_everywhere_and_at_single_places():
    panels = Panels(EDGES)
    values = polynomials(panels.nodes)
    np.testing.assert_allclose(panels.everywhere(values, X), polynomials(X), rtol=1e-9, atol=1e-9)
    which = np.random.default_rng(1).integers(0, 5, X.size)
    expected = polynomials(X)[which, np.arange(X.size)]
    np.testing.assert_allclose(panels.at(values, which, X), expected, rtol=1e-9, atol=1e-9)


def test_edges_and_nodes_give_the_values_they_have():
    panels = Panels(EDGES)
    assert panels.nodes.size == DEGREE * panels.count + 1
    np.testing.assert_array_equal(panels.nodes[::DEGREE], EDGES)
    values = np.exp(1j * panels.nodes)[None]
    np.testing.assert_allclose(panels.everywhere(values, panels.nodes), values, rtol=1e-14)


@pytest.mark.parametrize("width", [1.0, 2.0])
def test_the_highest_coefficients_tell_the_error(width):
    """1/(x - i d) on panels of a width: the error is within a few times the last coefficients, and
    a wider panel has a larger one."""
    panels = Panels(np.array([-width / 2, width / 2]))
    x = np.linspace(-width / 2, width / 2, 201)
    values = 1 / (panels.nodes - 0.7j)[None]
    error = np.abs(panels.everywhere(values, x)[0] - 1 / (x - 0.7j)).max()
    told = np.abs(panels.high_orders(values)[0, 0, -2:]).max()
    assert 0.1 * told < error < 3 * told
    assert (error > 1e-5) == (width == 2.0)


@pytest.mark.parametrize("seed", range(4))
def test_nothing_exceeds_its_bound(seed):
    """Polynomials of any degree, their values anywhere on a panel; and the bound is no more than
    what the theory allows above the largest value."""
    panels = Panels(EDGES)
    values = polynomials(panels.nodes, seed)
    bounds = panels.bounds(values, panels.high_orders(values))
    size = np.abs(polynomials(X, seed))
    for k in range(panels.count):
        here = (EDGES[k] <= X) & (EDGES[k + 1] >= X)
        assert np.all(size[:, here].max(axis=1) <= bounds[:, k] * (1 + 1e-12))
    flat = np.ones((1, panels.nodes.size), dtype=complex)
    assert np.all(panels.bounds(flat, panels.high_orders(flat)) < 1.5)


def test_no_places_and_no_functions_are_no_error():
    panels = Panels(EDGES)
    values = polynomials(panels.nodes)
    assert panels.everywhere(values, np.empty(0)).shape == (5, 0)
    assert panels.everywhere(values[:0], X).shape == (0, X.size)
    assert panels.at(values, np.empty(0, dtype=int), np.empty(0)).shape == (0,)
