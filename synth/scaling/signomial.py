"""Sums of exponentials of affine functions, with their gradients.

In the logarithms of levels, capacitors and resistors the response error, the noise and the
output currents of a block graph are all of this kind.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Signomial"]

Real = NDArray[np.float64]

# A trial step this far out (in ln) is worse than any point of interest; beyond it the value
# stands still instead of overflowing.
LARGEST_EXPONENT = 300.0


@dataclass(frozen=True, eq=False)
class Signomial:
    """sum_t coefficient_t exp(exponent_t . v), coefficients of either sign.

    Attributes
    ----------
    coefficients
        Shape (T,).
    exponents
        Shape (T, V).
    """

    coefficients: Real
    exponents: Real

    @classmethod
    def of_terms(cls, terms: Sequence[tuple[float, Real]], variables: int) -> Signomial:
        """From pairs of a coefficient and its exponents, shape (V,); none gives zero."""
        if not terms:
            return cls(np.zeros(1), np.zeros((1, variables)))
        return cls(np.array([c for c, _ in terms]), np.array([e for _, e in terms]))

    def __call__(self, v: Real) -> tuple[float, Real]:
        """Value and gradient, shape (V,), at `v`."""
        parts = self.coefficients * np.exp(np.minimum(self.exponents @ v, LARGEST_EXPONENT))
        return float(parts.sum()), parts @ self.exponents
