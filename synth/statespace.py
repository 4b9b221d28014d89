"""State-space systems and their norms: Gramians, Hankel singular values, L1, L2, Linf.

dx/dt = A x + B u, y = C x + D u, with several outputs y and one input u.  Time in [s]; all
norms of an impulse response or a transfer function are those of output over input.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.errors import NumericalError
from synth.graph import BlockGraph

__all__ = ["StateSpace"]

Real = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class StateSpace:
    """A system with one input.

    Attributes
    ----------
    A, B, C, D
        Shapes (n, n), (n,), (p, n), (p,); n and p at least 1.
    """

    A: Real
    B: Real
    C: Real
    D: Real

    def __post_init__(self) -> None:
        n, p = len(self.A), len(self.C)
        shapes = (self.A.shape, self.B.shape, self.C.shape, self.D.shape)
        if shapes != ((n, n), (n,), (p, n), (p,)):
            raise NumericalError(f"got matrices of shapes {shapes}, expected them to match")

    @classmethod
    def of_signals(cls, graph: BlockGraph, names: tuple[str, ...]) -> StateSpace:
        """The system from the input to the named signals of a graph."""
        rows = graph.signal_rows()
        A, B, _, _ = graph.state_matrices()
        picked = np.array([[float(v) for v in rows[name]] for name in names])
        return cls(
            np.array([[float(v) for v in row] for row in A]),
            np.array([float(v) for v in B]),
            picked[:, :-1],
            picked[:, -1],
        )

    @property
    def order(self) -> int:
        """Number of states."""
        return len(self.A)

    @cached_property
    def poles(self) -> NDArray[np.complex128]:
        """Eigenvalues of A [rad/s]."""
        return np.asarray(np.linalg.eigvals(self.A), dtype=np.complex128)

    @property
    def is_stable(self) -> bool:
        """Whether every pole lies left of the axis by more than rounding."""
        return bool(np.all(self.poles.real < -1e-12 * np.max(np.abs(self.poles))))

    def controllability_gramian(self) -> Real:
        """P with A P + P A^T + B B^T = 0, shape (n, n); the system must be stable."""
        return self._gramian(self.A, np.outer(self.B, self.B))

    def observability_gramian(self) -> Real:
        """Q with A^T Q + Q A + C^T C = 0, shape (n, n); the system must be stable."""
        return self._gramian(self.A.T, self.C.T @ self.C)

    def _gramian(self, A: Real, right: Real) -> Real:
        from scipy.linalg import solve_continuous_lyapunov

        self._require_stable()
        return np.asarray(solve_continuous_lyapunov(A, -right), dtype=np.float64)

    def _require_stable(self) -> None:
        if not self.is_stable:
            raise NumericalError(
                "a norm in the time domain was asked of a system with a pole on or right of "
                "the imaginary axis; expected every pole in the left half-plane"
            )

    def hankel_singular_values(self) -> Real:
        """sqrt of the eigenvalues of P Q, descending, shape (n,) (Moore 1981, from memory)."""
        product = self.controllability_gramian() @ self.observability_gramian()
        values = np.sqrt(np.maximum(np.linalg.eigvals(product).real, 0.0))
        return np.sort(values)[::-1]

    def l2_norms(self) -> Real:
        """sqrt of the integral of the squared impulse response of each output, shape (p,)
        [1/sqrt(s)]; infinite for an output with D != 0."""
        energy = np.einsum("pi,ij,pj->p", self.C, self.controllability_gramian(), self.C)
        return np.where(self.D != 0, math.inf, np.sqrt(energy))

    def l1_norms(self, *, resolution: float = 0.02) -> Real:
        """|D| plus the integral of |impulse response| of each output, shape (p,).

        It is the largest |y| that any input with |u| <= 1 can cause.  The integral is the
        total variation of the step response, summed over time steps of `resolution` divided
        by the largest modulus of the poles whose transients are still alive; the part lost
        where the impulse response changes sign inside a step is added back from a straight
        line between the ends of the step.
        """
        self._require_stable()
        total = np.abs(self.D).astype(float)
        state = self.B.copy()
        for step, count in self._time_segments(resolution):
            transition, integral = _step_matrices(self.A, step)
            states = _trajectory(transition, state, count)
            impulse = self.C @ states
            pieces = (self.C @ integral) @ states[:, :-1]
            total += np.sum(np.abs(pieces), axis=1) + _lost_at_sign_changes(impulse, step)
            state = states[:, -1]
        return total

    def _time_segments(self, resolution: float) -> list[tuple[float, int]]:
        """Time steps and their counts, coarser as fast transients die out."""
        gone = 36.0
        ends = sorted({gone / -p.real for p in self.poles})
        segments: list[tuple[float, int]] = []
        begin = 0.0
        for end in ends:
            alive = [abs(p) for p in self.poles if gone / -p.real >= end * (1 - 1e-9)]
            longest = resolution / max(alive)
            while end - begin > longest / 2:
                # At most 2**14 steps in one go; a segment may double its length each time.
                count = min(math.ceil((end - begin) / longest), 2**14)
                segments.append((min(longest, (end - begin) / count), count))
                begin += segments[-1][0] * count
        return segments


def _step_matrices(A: Real, step: float) -> tuple[Real, Real]:
    """exp(A h) and the integral of exp(A t) from 0 to h (Van Loan 1978, from memory)."""
    from scipy.linalg import expm

    n = len(A)
    block = np.zeros((2 * n, 2 * n))
    block[:n, :n] = A * step
    block[:n, n:] = np.eye(n) * step
    whole = expm(block)
    return np.asarray(whole[:n, :n]), np.asarray(whole[:n, n:])


def _trajectory(transition: Real, start: Real, count: int) -> Real:
    """States x_0 ... x_count of x_{k+1} = transition x_k, shape (n, count + 1), by doubling."""
    states = start[:, None]
    power = transition
    while states.shape[1] < count + 1:
        states = np.concatenate([states, power @ states], axis=1)
        power = power @ power
    return states[:, : count + 1]


def _lost_at_sign_changes(impulse: Real, step: float) -> Real:
    """What the sum of |integral over each step| misses of the integral of |impulse|."""
    left, right = impulse[:, :-1], impulse[:, 1:]
    a, b = np.abs(left), np.abs(right)
    crossing = (left * right < 0).astype(float)
    # Areas either side of the crossing of a straight line: h a^2/(2(a+b)) and h b^2/(2(a+b)).
    smaller = np.minimum(a, b) ** 2 / np.maximum(2 * (a + b), 1e-300)
    return np.asarray(2 * step * np.sum(crossing * smaller, axis=1))
