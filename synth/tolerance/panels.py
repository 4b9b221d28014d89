"""Smooth functions of one variable, many at once, by polynomials on panels.

A panel has `DEGREE` + 1 nodes, those of Chebyshev (the extremes of T_n), its ends among them, so
that neighbours share one.  What a polynomial through them cannot follow shows in its own highest
coefficients, which fall by a factor an order where a function is analytic (Trefethen,
*Approximation Theory and Approximation Practice*, 2013, chapters 3, 5 and 8, from memory).

Arrays have the axes (functions, nodes).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

__all__ = ["DEGREE", "Panels"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Index = NDArray[np.intp]

DEGREE = 12
"""Of the polynomials: with singularities a quarter turn off the axis, as those of real poles are
in ln frequency, a panel is then about a decade wide."""

HALF = DEGREE // 2

BETWEEN = 1.4143
"""A polynomial of degree `HALF` is between the nodes at most this many times the largest of its
sizes at them: 1 / cos(HALF pi / (2 DEGREE)) (Ehlich and Zeller 1964, from memory)."""

_ANGLES = np.pi * np.arange(DEGREE + 1) / DEGREE
_UNIT = -np.cos(_ANGLES)
_BARYCENTRIC = np.where(np.isin(np.arange(DEGREE + 1), (0, DEGREE)), 0.5, 1.0) * (
    -1.0
) ** np.arange(DEGREE + 1)


def _coefficient_matrix() -> Real:
    """From values at the nodes of a panel to coefficients of T_0 to T_n, shape (n + 1, n + 1)."""
    orders = np.arange(DEGREE + 1)
    weight = np.where(np.isin(orders, (0, DEGREE)), 0.5, 1.0)
    matrix = np.cos(np.outer(orders, np.pi - _ANGLES)) * weight * weight[:, None]
    return np.asarray(2 / DEGREE * matrix)


_COEFFICIENTS = _coefficient_matrix()


@dataclass(frozen=True, eq=False)
class Panels:
    """Panels from `edges[0]` to `edges[-1]`, in rising order; shape (panels + 1,)."""

    edges: Real

    @property
    def count(self) -> int:
        """How many panels there are."""
        return int(self.edges.size) - 1

    @cached_property
    def nodes(self) -> Real:
        """Where functions must be known, shape (DEGREE * panels + 1,)."""
        low, high = self.edges[:-1, None], self.edges[1:, None]
        inside = (low + high) / 2 + (high - low) / 2 * _UNIT[:-1]
        inside[:, 0] = self.edges[:-1]
        return np.append(inside.ravel(), self.edges[-1])

    @cached_property
    def members(self) -> Index:
        """The nodes of each panel, shape (panels, DEGREE + 1)."""
        return DEGREE * np.arange(self.count)[:, None] + np.arange(DEGREE + 1)

    def panel_of(self, x: Real) -> Index:
        """The panel that holds each `x`: the later one on an edge."""
        found = np.searchsorted(self.edges, x, side="right") - 1
        return np.clip(found, 0, self.count - 1)

    def weights(self, x: Real, panel: Index) -> Real:
        """What the values at the nodes of a panel count at `x` in it, shape (x, DEGREE + 1)."""
        apart = x[:, None] - self.nodes[self.members[panel]]
        hit = apart == 0
        apart[hit] = 1.0
        found = _BARYCENTRIC / apart
        found /= found.sum(axis=1, keepdims=True)
        met = hit.any(axis=1)
        found[met] = hit[met]
        return np.asarray(found)

    def at(self, values: Complex, function: Index, x: Real) -> Complex:
        """Function `function[k]` at `x[k]`."""
        panel = self.panel_of(x)
        weights = self.weights(x, panel)
        out = np.empty(x.size, dtype=complex)
        for k in np.unique(panel):
            here = np.flatnonzero(panel == k)
            # Pairs of real and imaginary parts: half the products of complex numbers.
            own = values[function[here], DEGREE * k : DEGREE * (k + 1) + 1]
            pairs = own.view(float).reshape(*own.shape, 2)
            out[here] = np.einsum("knc,kn->kc", pairs, weights[here]).view(complex)[:, 0]
        return out

    def everywhere(self, values: Complex, x: Real) -> Complex:
        """All functions at the same `x` in rising order, shape (functions, x)."""
        panel = self.panel_of(x)
        weights = self.weights(x, panel)
        out = np.empty((len(values), x.size), dtype=complex)
        for k in np.unique(panel):
            here = slice(*np.searchsorted(panel, (k, k + 1)))
            own, part = values[:, self.members[k]], weights[here].T
            out[:, here].real = own.real @ part
            out[:, here].imag = own.imag @ part
        return out

    def high_orders(self, values: Complex) -> Complex:
        """Coefficients of T_k with k above `HALF`, shape (functions, panels, DEGREE - HALF)."""
        own = values[:, self.members].reshape(-1, DEGREE + 1)
        matrix = _COEFFICIENTS[HALF + 1 :].T
        found = own.real @ matrix + 1j * (own.imag @ matrix)
        return found.reshape(len(values), self.count, DEGREE - HALF)

    def bounds(self, values: Complex, high_orders: Complex) -> Real:
        """What no function exceeds in a panel, shape (functions, panels)."""
        tail = np.abs(high_orders).sum(axis=2)
        size = np.abs(values)[:, self.members].max(axis=2)
        return np.asarray(BETWEEN * (size + tail) + tail)
