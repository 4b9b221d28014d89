"""The nodal equations as full matrices, solved by LAPACK: slow, pivoted, trusted.

Serves the few samples where the compiled elimination may not be trusted, and checks it.
Rows and columns as in `synth.nodal.structure`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from synth.errors import NumericalError
from synth.nodal.structure import Structure

__all__ = [
    "admittances",
    "equations",
    "inverse_gains",
    "reference",
    "solve_rows",
    "solve_samples",
    "solve_transposed",
]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


def admittances(structure: Structure, s: Complex, values: Real) -> Complex:
    """1/R or sC of every passive [S].

    `s` shape (samples,) [rad/s], `values` shape (samples, P); shape (samples, P).
    """
    return np.where(structure.is_resistor, 1.0 / values, s[:, None] * values)


def inverse_gains(s: Complex, gain_bandwidth: Real, open_loop_gain: Real) -> Complex:
    """a = 1/A0 + s/(2 pi GBW); `s` shape (samples,), figures (samples, U) or (U,)."""
    return 1.0 / open_loop_gain + s[:, None] / (2 * np.pi * gain_bandwidth)


def equations(structure: Structure, y: Complex, a: Complex) -> Complex:
    """The matrix of every sample, shape (samples, n, n + 2).

    Column n holds what the input of 1 V contributes, column n + 1 (ground) is of no use.
    `y` shape (samples, P) [S], `a` shape (samples, U).
    """
    n = structure.size
    matrix = np.zeros((y.shape[0], n, n + 2), dtype=complex)
    for k, (p, q) in enumerate(structure.ends):
        for row, other in ((p, q), (q, p)):
            if row < n and row not in structure.driver:
                matrix[:, row, row] += y[:, k]
                matrix[:, row, other] -= y[:, k]
    for k, (plus, minus, out) in enumerate(structure.pins):
        matrix[:, out, plus] += 1.0
        matrix[:, out, minus] -= 1.0
        matrix[:, out, out] -= a[:, k]
    return matrix


def solve_rows(matrix: Complex, right: Complex, *, transposed: bool = False) -> Complex:
    """x with matrix x = right, or with matrix^T x = right; rows are balanced first.

    `matrix` shape (samples, n, n), `right` (samples, n, m).

    Raises
    ------
    NumericalError
        A singular sample.
    """
    scale = np.max(np.abs(matrix), axis=2, keepdims=True)
    if not np.all(scale > 0):
        raise _singular()
    balanced = matrix / scale
    try:
        if transposed:
            return np.asarray(np.linalg.solve(balanced.swapaxes(1, 2), right) / scale)
        return np.asarray(np.linalg.solve(balanced, right / scale))
    except np.linalg.LinAlgError:
        raise _singular() from None


def solve_samples(structure: Structure, y: Complex, a: Complex) -> Complex:
    """Voltages of all nets, input and ground included, shape (samples, n + 2)."""
    n = structure.size
    matrix = equations(structure, y, a)
    solved = np.zeros((y.shape[0], n + 2), dtype=complex)
    solved[:, :n] = solve_rows(matrix[:, :, :n], -matrix[:, :, n : n + 1])[:, :, 0]
    solved[:, n] = 1.0
    return solved


def solve_transposed(structure: Structure, y: Complex, a: Complex, observed: int) -> Complex:
    """psi with M^T psi = unit vector at unknown net `observed`, shape (samples, n)."""
    n = structure.size
    matrix = equations(structure, y, a)[:, :, :n]
    right = np.zeros((y.shape[0], n, 1), dtype=complex)
    right[:, observed] = 1.0
    return solve_rows(matrix, right, transposed=True)[:, :, 0]


def reference(
    structure: Structure, y: Complex, a: Complex, *, observed: int | None = None
) -> tuple[Complex, Real]:
    """All unknowns to full double accuracy, and the accuracy any method may be asked for.

    Solves the equations, or with `observed` the transposed ones with a unit right-hand side
    there; shapes (samples, n).  Residuals are taken in extended precision.  The second array is
    the relative change of every unknown when every entry of the matrix changes by one unit of
    rounding (Skeel 1979, "Scaling for numerical stability in Gaussian elimination", from memory);
    inf for an unknown that is 0.

    Raises
    ------
    NumericalError
        A singular sample.
    """
    n = structure.size
    matrix = equations(structure, y, a)
    right = -matrix[:, :, n]
    matrix = matrix[:, :, :n]
    if observed is not None:
        matrix = np.ascontiguousarray(matrix.swapaxes(1, 2))
        right = np.zeros(right.shape, dtype=complex)
        right[:, observed] = 1.0
    inverse = solve_rows(matrix, np.broadcast_to(np.eye(n, dtype=complex), matrix.shape))
    wide = matrix.astype(np.clongdouble)
    solved = np.einsum("sij,sj->si", inverse, right)
    for _ in range(3):
        residual = right - np.einsum("sij,sj->si", wide, solved)
        solved = solved + np.einsum("sij,sj->si", inverse, residual.astype(complex))
    size = np.abs(solved)
    bound = (np.abs(inverse) @ (np.abs(matrix) @ size[:, :, None]))[:, :, 0]
    with np.errstate(divide="ignore", invalid="ignore"):
        amplification = np.where(size > 0, bound / size, np.inf)
    return solved, np.finfo(float).eps * amplification


def _singular() -> NumericalError:
    return NumericalError(
        "the nodal equations are singular at a frequency: a net that only capacitors hold at "
        "DC, or a loop that oscillates there exactly; change the frequency or add a DC path"
    )
