"""Groups of parts that act on ln H each by itself, as the sections of a cascade do.

det(I + X Delta) is a product over the strongly connected components of the graph whose edges are
the entries of X that are not 0, for every term of a determinant runs along cycles.  Where the
components of X and of Y are joined into groups, each of both determinants is a product over
groups, and ln H a sum.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from synth.worstcase.expansion import Expansion

__all__ = ["independent_groups"]

# An entry is rounding when it is this small against the two terms it is the difference of.
NEGLIGIBLE = 1e-10


def independent_groups(expansion: Expansion) -> tuple[NDArray[np.intp], ...]:
    """The groups of variables, each in rising order, as the zeros that X and Y have at every
    sample of `expansion` show them."""
    x, y = expansion.denominator, expansion.numerator
    if not (np.isfinite(x).all() and np.isfinite(y).all()):
        return (np.arange(x.shape[1]),)
    scale = np.abs(x) + np.abs(x - y)
    joined = _cycles(np.abs(x) > NEGLIGIBLE * scale) | _cycles(np.abs(y) > NEGLIGIBLE * scale)
    together = _reach(joined)
    first = np.argmax(together, axis=1)
    return tuple(np.flatnonzero(first == k) for k in np.unique(first))


def _cycles(edges: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Which two variables lie on a common cycle, shape (V, V), of edges (N, V, V) at any sample."""
    reach = _reach(np.any(edges, axis=0))
    return np.asarray(reach & reach.T)


def _reach(edges: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Where one gets along the edges, in any number of steps."""
    found = edges | np.eye(edges.shape[0], dtype=bool)
    for _ in range(edges.shape[0].bit_length()):
        found = found @ found
    return found
