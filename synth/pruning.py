"""A state space with fewer coefficients and the same response.

A, B, C, D stand in one bordered matrix M = [[A, B], [C, D]]; its last row and column are the
output and the input.  With x = (sI - A)^-1 B and y = (sI - A^T)^-1 C^T, both bordered with a
one, a relative change d of the coefficient M_ij changes the response by y_i M_ij x_j d.

Which coefficient matters least follows from these slopes alone: where the others can make up
for its loss with a small change, it goes, and they are corrected to the response by the least
relative change (Gauss-Newton, minimum norm).  Errors and slopes are relative to the larger of
the response and the largest summand of the output, as rounding and tolerance see them.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.errors import NumericalError
from synth.statespace import StateSpace

__all__ = ["Wanted", "pruned", "turned"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Mask = NDArray[np.bool_]

# Largest error of the response after a correction, relative as the module says, and the one
# accepted where rounding alone leaves more (a pair of high Q); a correction goes on while it
# gains, down to where a double ends.
CORRECTED = 1e-12
ACCEPTED = 1e-10
ROUNDING = 1e-14
CORRECTION_STEPS = 10

# A step of the logarithm of a coefficient beyond this leaves the region where slopes hold.
LARGEST_STEP = 0.5

# A coefficient stays if the first-order change of the others, as a norm of their relative
# changes, exceeds this: slopes say nothing so far out.
LARGEST_CHANGE = 2.0

# Noise and sensitivity of a balanced realization are the least there are; pruning may give
# away this share of each.  On low-passes and band-passes of order 3 to 8, 5 % leaves half
# to two thirds of the coefficients and the scatter from part tolerance where it was; 20 %
# saves one or two more.
GIVEN_AWAY = 0.05

# Balanced realizations are symmetric, so choices come in pairs of equal merit: logarithms are
# compared to this many digits and the first of equals is taken, whatever rounding says.
EQUAL_DIGITS = 6

# Angles tried for the rotation of two states, over half a turn.
ANGLES = np.linspace(0, np.pi, 60, endpoint=False)
SWEEPS = 4
GAIN_OF_SWEEP = 1e-3

# A coefficient a rotation made zero, relative to the largest.
ZERO = 1e-13


@dataclass(frozen=True, eq=False)
class Wanted:
    """The response a state space must keep.

    Attributes
    ----------
    s
        Complex frequencies, in the units of 1/time of the state space, shape (P,).
    response
        Wanted there, shape (P,).
    size
        What an error is relative to, shape (P,).
    """

    s: Complex
    response: Complex
    size: Real

    @classmethod
    def of(cls, system: StateSpace, s: Complex, response: Complex) -> Wanted:
        """With the sizes of the response and the summands of `system`, which realises it
        nearly."""
        x, _ = _states(_bordered(system), s)
        summands = np.max(np.abs(x * np.append(system.C[0], system.D[0])), axis=1)
        size = np.maximum(np.abs(response), summands)
        # Where nothing is added up at all, an error is as bad as anywhere.
        return cls(s, response, np.where(size > 0, size, np.max(size)))

    def error(self, system: StateSpace) -> float:
        """Largest error of the response of `system`."""
        error, _ = self._error_and_slopes(_bordered(system))
        return float(np.max(np.abs(error)))

    def _error_and_slopes(self, matrix: Real) -> tuple[Complex, Complex]:
        """Wanted less found, shape (P,), and y_i M_ij x_j, shape (P, n + 1, n + 1)."""
        x, y = _states(matrix, self.s)
        found = x @ matrix[-1]
        slopes = y[:, :, None] * x[:, None, :] * (matrix / self.size[:, None, None])
        return (self.response - found) / self.size, slopes


def pruned(system: StateSpace, wanted: Wanted) -> StateSpace:
    """The system with as many coefficients zero as noise and sensitivity allow.

    Parameters
    ----------
    system
        One input, one output, stable; balanced or nearly so, for the limits to mean what
        they say.  D stays.

    Raises
    ------
    NumericalError
        The system itself cannot be corrected to the wanted response.
    """
    matrix = _bordered(system)
    kept = matrix != 0
    kept[-1, -1] = False
    matrix, miss = _corrected(matrix, kept, wanted)
    if not miss < ACCEPTED:
        raise NumericalError(
            f"a realization misses its response by {miss:.1e} and a correction does not converge; "
            "its Hankel singular values may spread too far"
        )
    # In order: largest error, noise and sensitivity.
    most = (1 + GIVEN_AWAY) * np.array(_costs(matrix, kept, wanted))
    limits = np.array([max(CORRECTED, 4 * miss), *most])
    while True:
        removed = _one_less(matrix, kept, wanted, limits)
        if removed is None:
            return _system(matrix)
        matrix, kept = removed


def turned(system: StateSpace, wanted: Wanted, pairs: list[tuple[int, int]]) -> StateSpace:
    """The system with the given pairs of states rotated so that coefficients become small.

    Each pair is turned by the angle with the least sum over all coefficients of the root mean
    square of their slopes: a sum of absolute values, which prefers zeros.  A rotation of a
    system with equal Gramians keeps them equal.
    """
    matrix = _bordered(system)
    x, y = (v / np.sqrt(wanted.size)[:, None] for v in _states(matrix, wanted.s))
    for _ in range(SWEEPS):
        before = _weight(matrix, x, y)
        for i, j in pairs:
            # Besides even steps: the angles that take away the input or the output of j.
            special = [
                math.atan2(matrix[j, -1], matrix[i, -1]),
                math.atan2(matrix[-1, j], matrix[-1, i]),
            ]
            matrix, x, y = min(
                (_rotated(matrix, x, y, (i, j), float(a)) for a in (*ANGLES, *special)),
                key=lambda trial: round(math.log(_weight(*trial)), EQUAL_DIGITS),
            )
        if _weight(matrix, x, y) > before * (1 - GAIN_OF_SWEEP):
            break
    return _system(np.where(np.abs(matrix) < ZERO * np.max(np.abs(matrix)), 0.0, matrix))


def _bordered(system: StateSpace) -> Real:
    return np.block([[system.A, system.B[:, None]], [system.C, system.D[:, None]]])


def _system(matrix: Real) -> StateSpace:
    return StateSpace(matrix[:-1, :-1], matrix[:-1, -1], matrix[-1:, :-1], matrix[-1:, -1])


def _states(matrix: Real, s: Complex) -> tuple[Complex, Complex]:
    """x and y of the module's docstring, shape (P, n + 1) each."""
    n = len(matrix) - 1
    resolvent = s[:, None, None] * np.eye(n) - matrix[:-1, :-1]
    one = np.ones((s.size, 1), dtype=complex)
    right = np.broadcast_to(matrix[:-1, -1:], (s.size, n, 1))
    left = np.broadcast_to(matrix[-1:, :-1].T, (s.size, n, 1))
    x = np.linalg.solve(resolvent, right)[:, :, 0]
    y = np.linalg.solve(np.swapaxes(resolvent, 1, 2), left)[:, :, 0]
    return np.concatenate([x, one], axis=1), np.concatenate([y, one], axis=1)


def _one_less(matrix: Real, kept: Mask, wanted: Wanted, limits: Real) -> tuple[Real, Mask] | None:
    """Without the coefficient that is missed least, the others corrected; None if each is
    needed."""
    _, slopes = wanted._error_and_slopes(matrix)
    _, _, rows = _decomposed(slopes, kept)
    # N = 1 - V V^T projects on the changes the response does not see.  The least one that
    # takes coefficient k away changes the others by 1 / N_kk - 1 in squared norm.
    free = np.maximum(1 - np.sum(rows**2, axis=0), 1e-300)
    change = np.full(matrix.shape, np.inf)
    change[kept] = (1 - free) / free
    rank = np.round(np.log(np.maximum(change, 1e-300)), EQUAL_DIGITS)
    for place in np.argsort(rank, axis=None, kind="stable"):
        k = np.unravel_index(place, matrix.shape)
        if not change[k] < LARGEST_CHANGE**2:
            return None
        fewer = kept.copy()
        fewer[k] = False
        found, miss = _corrected(np.where(fewer | ~kept, matrix, 0.0), fewer, wanted)
        if miss < limits[0] and bool(np.all(np.array(_costs(found, fewer, wanted)) <= limits[1:])):
            return found, fewer
    return None


def _corrected(matrix: Real, kept: Mask, wanted: Wanted) -> tuple[Real, float]:
    """The coefficients in `kept` changed least, so that the response is the wanted one, and
    the largest error left; infinite where that does not converge."""
    best, least = matrix, math.inf
    for _ in range(CORRECTION_STEPS):
        try:
            error, slopes = wanted._error_and_slopes(matrix)
        except np.linalg.LinAlgError:
            break
        miss = float(np.max(np.abs(error)))
        if miss > 2 * least or (least < CORRECTED and miss > least / 2):
            break
        if miss < least:
            best, least = matrix, miss
        if miss < ROUNDING:
            break
        columns, sizes, rows = _decomposed(slopes, kept)
        if not sizes[-1] > 0:
            break
        step = rows.T @ ((columns.T @ np.concatenate([error.real, error.imag])) / sizes)
        if not np.max(np.abs(step)) < LARGEST_STEP:
            break
        matrix = matrix.copy()
        matrix[kept] *= np.exp(step)
    return best, least


def _decomposed(slopes: Complex, kept: Mask) -> tuple[Real, Real, Real]:
    """Singular value decomposition of the slopes of the coefficients in `kept`.

    A strictly proper H of order n has 2n coefficients, so only 2n directions change it.
    """
    picked = slopes[:, kept]
    left, sizes, right = np.linalg.svd(
        np.concatenate([picked.real, picked.imag]), full_matrices=False
    )
    rank = min(2 * (len(kept) - 1), sizes.size)
    return left[:, :rank], sizes[:rank], right[:rank]


def _costs(matrix: Real, kept: Mask, wanted: Wanted) -> tuple[float, float]:
    """Noise, as sum of sqrt(P_ii Q_ii), and sensitivity, as the root of the sum of all squared
    slopes; infinite for an unstable system."""
    try:
        system = _system(matrix)
        squares = np.diag(system.controllability_gramian()) * np.diag(
            system.observability_gramian()
        )
        _, slopes = wanted._error_and_slopes(matrix)
    except (NumericalError, np.linalg.LinAlgError):
        return math.inf, math.inf
    noise = float(np.sum(np.sqrt(np.maximum(squares, 0.0))))
    return noise, float(np.linalg.norm(slopes[:, kept]))


def _rotated(
    matrix: Real, x: Complex, y: Complex, pair: tuple[int, int], angle: float
) -> tuple[Real, Complex, Complex]:
    """The matrix with states turned, R^T M R, and x and y with it."""
    turn = np.eye(len(matrix))
    cosine, sine = math.cos(angle), math.sin(angle)
    turn[np.ix_(pair, pair)] = [[cosine, -sine], [sine, cosine]]
    return turn.T @ matrix @ turn, x @ turn, y @ turn


def _weight(matrix: Real, x: Complex, y: Complex) -> float:
    """Sum over all coefficients of the root mean square of their slopes, over sqrt(P)."""
    squares = np.abs(y).T ** 2 @ np.abs(x) ** 2
    return float(np.sum(np.abs(matrix) * np.sqrt(squares)))
