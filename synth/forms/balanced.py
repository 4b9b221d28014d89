"""The balanced form (Moore 1981, from memory), with the coefficients it can do without left out.

In balanced coordinates both Gramians are one diagonal matrix of Hankel singular values: every
state is as easily driven as seen, and the noise of the integrators and the sensitivity to
coefficients are near the least there is.  The price is full matrices, n^2 + 2 n coefficients.
`synth.pruning` takes away those that hardly matter and corrects the rest, so that the graph
equals H(s) as closely as doubles allow.

The square-root method: P = R R^T, Q = L L^T (Cholesky), L^T R = U S V^T, then T = R V S^-1/2
and its inverse S^-1/2 U^T L^T (Laub, Heath, Paige and Ward 1987, from memory).  Frequencies
are first divided by the geometric mean of the poles.

States whose Hankel values nearly coincide are turned among themselves towards zeros.  Without
it a slow and a fast pole of like Hankel values are mixed: a lead-lag with poles at 0.25, 60
and 600 Hz then scatters about 20 dB at 1 % tolerance, with it 0.2 dB.
"""

from __future__ import annotations

import math
import warnings
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.errors import NumericalError, RealizationError
from synth.forms.cascade import cascade
from synth.forms.common import with_output
from synth.graph import INPUT, Block, BlockGraph, Term
from synth.pruning import Wanted, pruned, turned
from synth.statespace import StateSpace
from synth.transfer import TransferFunction

__all__ = ["Balanced", "balanced", "balanced_realization"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

# Hankel values come from Gramians that are good to about 1e-15 of their largest entry: below
# this ratio the smallest would be wrong by more than 1e-6 of itself.
LEAST_RATIO = 1e-9

# Distance of a pole from the axis over the largest pole, below which a Lyapunov equation in
# doubles does not see it.
LEAST_DAMPING = 1e-11

# Rounds of balancing: the second works on matrices of even size.
ROUNDS = 2

# Hankel values within this ratio count as nearly equal.
NEARLY_EQUAL = 0.8

# Where the response is matched: so far (a ratio) beyond the lowest and the highest root, with
# so many points a decade.
BEYOND = 30.0
POINTS_PER_DECADE = 6

# Where it is checked, and how well it must be met, relative to the largest summand.
CHECKED_BEYOND = 1e4
CHECKED_PER_DECADE = 20
ACCURACY = 1e-10


@dataclass(frozen=True, eq=False)
class Balanced:
    """A realization with equal, diagonal Gramians.

    Attributes
    ----------
    system
        In units of time of 1 / `frequency`.
    frequency
        Geometric mean of the poles [rad/s].
    hankel
        Hankel singular values, descending, shape (n,).
    """

    system: StateSpace
    frequency: float
    hankel: Real


def balanced(target: TransferFunction) -> BlockGraph:
    """The balanced form of a stable H(s), pruned, weights to a double.

    Raises
    ------
    RealizationError
        A pole on or right of the imaginary axis, or Hankel singular values or poles that
        spread further than doubles hold.
    """
    found = balanced_realization(target)
    w0, hankel = found.frequency, found.hankel
    s = np.asarray(1j * _points(target, BEYOND, POINTS_PER_DECADE) / w0)
    wanted = Wanted.of(found.system, s, target.at(s * w0))
    order = range(target.order)
    near = [(i, j) for i in order for j in order[i + 1 :] if hankel[j] > NEARLY_EQUAL * hankel[i]]
    try:
        system = pruned(turned(found.system, wanted, near), wanted)
    except NumericalError:
        raise _inexact(wanted.error(found.system), hankel) from None
    except np.linalg.LinAlgError:
        raise _too_wide(hankel) from None
    s = np.asarray(1j * _points(target, CHECKED_BEYOND, CHECKED_PER_DECADE) / w0)
    error = Wanted.of(system, s, target.at(s * w0)).error(system)
    if not error < ACCURACY:
        raise _inexact(error, hankel)
    return _graph(system, w0)


def balanced_realization(target: TransferFunction) -> Balanced:
    """The full balanced realization of a stable H(s), before any pruning.

    Raises
    ------
    RealizationError
        As `balanced`.
    """
    _require_stable(target)
    w0 = math.exp(float(np.mean(np.log(np.abs(target.poles)))))
    system = _even(target, w0)
    for _ in range(ROUNDS):
        if not system.is_stable:
            raise _too_wide(None)
        system, hankel = _balanced_once(system)
        if not hankel[-1] > LEAST_RATIO * hankel[0]:
            raise _too_wide(hankel)
    return Balanced(system, w0, hankel)


def _require_stable(target: TransferFunction) -> None:
    damping = float(np.min(-target.poles.real))
    largest = float(np.max(np.abs(target.poles)))
    if damping <= 0:
        raise RealizationError(
            "board.form: the balanced form needs every pole left of the imaginary axis, got one "
            "on or right of it; expected another form"
        )
    if damping < LEAST_DAMPING * largest:
        raise RealizationError(
            f"board.form: the balanced form needs poles no nearer to the axis than "
            f"{LEAST_DAMPING:.0e} of the largest, got {damping / largest:.1e}; "
            "expected another form"
        )


def _too_wide(hankel: Real | None) -> RealizationError:
    """The error for Hankel values that doubles do not hold together, None if they do not even
    give them."""
    found = "more than 1e15" if hankel is None else f"{hankel[0] / max(hankel[-1], 1e-300):.1e}"
    return RealizationError(
        f"board.form: got Hankel singular values of H(s) that spread over a ratio of {found}; "
        f"the balanced form takes at most {1 / LEAST_RATIO:.0e}, expected another form"
    )


def _inexact(error: float, hankel: Real) -> RealizationError:
    return RealizationError(
        f"board.form: the balanced form misses H(s) by {error:.1e} in doubles, with Hankel "
        f"singular values from {hankel[0]:.3g} to {hankel[-1]:.3g}; expected another form"
    )


def _even(target: TransferFunction, w0: float) -> StateSpace:
    """A cascade with signals of even size, in units of 1 / w0."""
    graph = cascade(target)
    s = 1j * _points(target, 1.0, POINTS_PER_DECADE)[1:]
    peaks = {name: float(np.max(np.abs(v))) for name, v in graph.signals(s).items()}
    levels = {name: 1 / peak for name, peak in peaks.items() if peak}
    system = StateSpace.of_signals(graph.rescaled(levels), (graph.output,))
    back = peaks[graph.output]
    return StateSpace(system.A / w0, system.B / w0, system.C * back, system.D * back)


def _balanced_once(system: StateSpace) -> tuple[StateSpace, Real]:
    """The system in balanced coordinates and its Hankel singular values."""
    try:
        with warnings.catch_warnings():
            # The solver of Lyapunov equations warns where doubles do not hold the answer.
            warnings.simplefilter("error", RuntimeWarning)
            P, Q = system.controllability_gramian(), system.observability_gramian()
        R, L = np.linalg.cholesky(P), np.linalg.cholesky(Q)
    except (RuntimeWarning, np.linalg.LinAlgError):
        raise _too_wide(None) from None
    U, hankel, Vt = np.linalg.svd(L.T @ R)
    T = R @ Vt.T / np.sqrt(hankel)
    inverse = (U / np.sqrt(hankel)).T @ L.T
    found = StateSpace(inverse @ system.A @ T, inverse @ system.B, system.C @ T, system.D)
    return found, np.asarray(hankel)


def _points(target: TransferFunction, beyond: float, per_decade: int) -> Real:
    """Zero, a geometric grid over the roots and `beyond` times further, and each complex pair
    of poles with its flanks [rad/s], ascending."""
    factors = (*target.pole_factors, *target.zero_factors)
    corners = [f.natural_frequency for f in factors if f.natural_frequency]
    low, high = min(corners) / beyond, max(corners) * beyond
    count = max(3 * target.order, round(per_decade * math.log10(high / low)))
    near = [
        pair.natural_frequency * (1 + side / (2 * pair.q))
        for pair in target.pole_factors
        if pair.degree == 2 and pair.q > 0.5
        for side in (-1, 0, 1)
    ]
    return np.union1d(np.concatenate([[0.0], np.geomspace(low, high, count)]), near)


def _graph(system: StateSpace, w0: float) -> BlockGraph:
    """Integrators for the states and an adder for the output, zero coefficients left out."""
    names = [f"x{k + 1}" for k in range(system.order)]
    blocks = []
    for i, name in enumerate(names, start=1):
        terms = [Term(INPUT, float(w0 * system.B[i - 1]), f"B{i}, input into {name}")]
        terms += [
            Term(source, float(w0 * a), f"A{i},{j}, {source} into {name}")
            for j, (source, a) in enumerate(zip(names, system.A[i - 1], strict=True), start=1)
        ]
        blocks.append(Block(name, "integrator", tuple(t for t in terms if t.weight)))
    output = [
        Term(name, float(c), f"C{j}, {name} to output")
        for j, (name, c) in enumerate(zip(names, system.C[0], strict=True), start=1)
    ]
    output.append(Term(INPUT, float(system.D[0]), "D, input to output"))
    return with_output("balanced", blocks, [t for t in output if t.weight], "y")
