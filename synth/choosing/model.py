"""The response error as a small linear least-squares model in the logarithms of the parts.

ln H is close to linear in the ln of the parts: coefficients are products of powers of R and C,
and near the target ln H is linear in their logarithms; along the free scales of states and
impedances it does not move at all.  With the Jacobian J of ln H by the adjoint, weighted and
split into real and imaginary parts, the mean square error is |J d + r|^2, d = ln p - ln p_ref.
A singular value decomposition keeps the few directions that matter.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.nodal import NodalProgram

__all__ = ["LevelLimits", "LinearModel", "compensation", "mean_square_error"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

# Singular values below this share of the largest are directions that do not move ln H.
NEGLIGIBLE = 1e-9


# Residuals are made up for along directions that move ln H by more than this per unit of ln p;
# weaker ones (what the finite gain of the op-amps lets through) would need huge changes.
RIDGE = 3e-3


def compensation(matrix: Real, ridge: float = RIDGE) -> Real:
    """G so that d = -G r makes |matrix d + r|^2 + (ridge |d|)^2 least, shape (P, K)."""
    left, singular, right = np.linalg.svd(matrix, full_matrices=False)
    return np.asarray((right.T * (singular / (singular**2 + ridge**2))) @ left.T)


@dataclass(frozen=True, eq=False)
class LinearModel:
    """mean |error of ln H|^2 = |matrix d + offset|^2 + floor, d = ln p - reference.

    Attributes
    ----------
    matrix, offset
        Shapes (K, P) and (K,), K at most the rank.
    floor
        What no change of values removes.
    reference
        ln of the values it is linear about, shape (P,).
    """

    matrix: Real
    offset: Real
    floor: float
    reference: Real

    @classmethod
    def about(
        cls, program: NodalProgram, values: Real, target: Complex, frequency_hz: Real
    ) -> LinearModel:
        """The model about `values` (P,), for a target response (F,) at `frequency_hz` (F,)."""
        found = program.sensitivities(frequency_hz, values=values)
        error = np.log(found.response / target)
        scale = 1 / np.sqrt(frequency_hz.size)
        jacobian = np.concatenate([found.passives.real, found.passives.imag]) * scale
        residual = np.concatenate([error.real, error.imag]) * scale
        left, singular, right = np.linalg.svd(jacobian, full_matrices=False)
        keep = singular > NEGLIGIBLE * singular[0]
        offset = left[:, keep].T @ residual
        floor = max(float(residual @ residual - offset @ offset), 0.0)
        return cls(singular[keep, None] * right[keep], offset, floor, np.log(values))

    def residual(self, logs: Real) -> Real:
        """matrix d + offset at ln p = `logs`, shape (K,)."""
        return self.matrix @ (logs - self.reference) + self.offset

    def mean_square(self, logs: Real) -> float:
        """Predicted mean square error at ln p = `logs`."""
        residual = self.residual(logs)
        return float(residual @ residual) + self.floor


@dataclass(frozen=True, eq=False)
class LevelLimits:
    """How far the peaks of the op-amp outputs may rise: matrix (ln p - reference) <= slack.

    `matrix` (U, P) holds the sensitivities of the ln of each output's gain at the frequency of
    its peak, `slack` (U,) the ln of how far it may rise.
    """

    matrix: Real
    slack: Real
    reference: Real

    def excess(self, logs: Real) -> Real:
        """By how much the ln of each output's peak passes its ceiling, negative below it."""
        return np.asarray(self.matrix @ (logs - self.reference) - self.slack)

    def hold(self, logs: Real) -> bool:
        """Whether every output stays below its ceiling at ln p = `logs`."""
        return bool(np.all(self.excess(logs) <= 1e-12))


def mean_square_error(
    program: NodalProgram, values: Real, target: Complex, frequency_hz: Real
) -> Real:
    """Mean square of |ln(H/target)| of each board, values (boards, P), shape (boards,)."""
    response = program.solve(frequency_hz, values=values)
    return np.asarray(np.mean(np.abs(np.log(response / target)) ** 2, axis=-1))
