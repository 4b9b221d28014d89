"""The natural frequencies of boards, and their op-amp outputs as a state space.

With one-pole op-amps the nodal matrix is linear in s, M(s) = M0 + s M1, and every capacitor and
every op-amp adds one term of rank one to M1, M1 = L diag(d) R^T.  About a real shift w0 > 0

    M(s) = M(w0) (I - (w0 - s) M(w0)^-1 L diag(d) R^T),

so the poles are w0 - 1/mu over the eigenvalues mu of T = R^T M(w0)^-1 L diag(d), a matrix with a
row for each capacitor (its voltage) and for each op-amp (its output): no pencil has to be reduced
and no entry is lost beside much larger ones.  mu = 0, a loop of capacitors, is no pole.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.errors import NumericalError
from synth.nodal import dense
from synth.nodal.region import Boards
from synth.nodal.structure import Structure
from synth.statespace import StateSpace

__all__ = ["natural_frequencies", "pole_slopes", "state_space"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

# Eigenvalues below this share of the largest are those of loops of capacitors.
NO_POLE = 1e-14

# How far the state space may be from the nodal equations, in volts per volt of the input, or as a
# share of the largest voltage over the frequencies it is checked at where that is more.
AGREEMENT = 1e-6


@dataclass(frozen=True, eq=False)
class _Shifted:
    """The boards at the shift.

    `left` (n, r) and `right` (r, n + 2) are L and R^T, `rates` (boards, r) is d, `solved`
    (boards, n, r) is M(w0)^-1 L diag(d), `driven` (boards, n) the voltages at s = w0 for 1 V at
    the input, `matrix` (boards, r, r) is T.
    """

    shift: float
    right: Real
    solved: Real
    driven: Real
    matrix: Real

    @classmethod
    def of(cls, structure: Structure, boards: Boards) -> _Shifted:
        """Solve the equations of all boards at one shift amid their corners."""
        n = structure.size
        shift = _shift(structure)
        left, right = _incidence(structure)
        s = np.full(boards.count, shift, dtype=complex)
        y = dense.admittances(structure, s, boards.values)
        a = 1.0 / boards.open_loop_gain + shift / (2 * np.pi * boards.gain_bandwidth)
        whole = dense.equations(structure, y, a.astype(complex))
        rates = np.concatenate(
            [boards.values[:, ~structure.is_resistor], -1 / (2 * np.pi * boards.gain_bandwidth)],
            axis=1,
        )
        sources = np.concatenate([left[None] * rates[:, None, :], -whole[:, :, n : n + 1]], axis=2)
        found = dense.solve_rows(whole[:, :, :n], sources).real
        solved, driven = found[:, :, :-1], found[:, :, -1]
        return cls(shift, right, solved, driven, right[:, :n] @ solved)

    def poles(self) -> Complex:
        """Shape (boards, r) [rad/s]; infinite where there is none."""
        mu = np.linalg.eigvals(self.matrix).astype(complex)
        return self.to_poles(mu)

    def to_poles(self, mu: Complex) -> Complex:
        """Poles of eigenvalues of T, shape (..., r)."""
        size = np.abs(mu)
        with np.errstate(divide="ignore", invalid="ignore"):
            poles = self.shift - 1.0 / mu
        return np.where(size > NO_POLE * np.max(size, axis=-1, keepdims=True), poles, np.inf)


def natural_frequencies(structure: Structure, boards: Boards) -> Complex:
    """Poles of every board, shape (boards, capacitors + op-amps) [rad/s].

    inf + 0j stands where a loop of capacitors leaves a pole out.

    Raises
    ------
    NumericalError
        The equations are singular at the shift.
    """
    return _Shifted.of(structure, boards).poles()


def pole_slopes(structure: Structure, board: Boards) -> tuple[Complex, Complex]:
    """Poles of one board, shape (r,) [rad/s], and their slopes over ln of every passive and of
    every op-amp's gain-bandwidth, shape (r, P + U) [rad/s].

    dp = -(y^T dM(p) x) / (y^T M1 x) with the right and left null vectors x and y of M(p); where
    two poles meet there is no slope, and it comes out large.

    Raises
    ------
    NumericalError
        The equations are singular at the shift.
    """
    n = structure.size
    shifted = _Shifted.of(structure, board)
    mu, vectors = np.linalg.eig(shifted.matrix[0].astype(complex))
    poles = shifted.to_poles(mu)
    left, right = _incidence(structure)
    columns = right[:, :n].astype(complex)
    slopes = np.zeros((mu.size, len(structure.refs) + len(structure.amplifiers)), dtype=complex)
    found = np.isfinite(poles)
    # Right null vectors from those of T; left ones from the equations transposed at the shift.
    transposed = np.linalg.inv(vectors)
    whole = _matrix_at(structure, board, shifted.shift)
    adjoint = np.linalg.solve(whole.T, columns.T).T
    x = (shifted.solved[0] @ vectors).T
    y = transposed @ adjoint
    rates = np.concatenate(
        [board.values[0][~structure.is_resistor], -1 / (2 * np.pi * board.gain_bandwidth[0])]
    )
    weight = np.einsum("kn,nr,r,rm,km->k", y, left, rates, columns, x)
    with np.errstate(all="ignore"):
        for k in np.flatnonzero(found):
            moved = _moved(structure, board, poles[k], x[k], y[k])
            slopes[k] = -moved / weight[k]
    return poles, slopes


def state_space(structure: Structure, board: Boards, nets: tuple[int, ...]) -> StateSpace:
    """One board from its input to the voltages of `nets` (columns of the structure).

    A = w0 - T^-1 in the coordinates of the real Schur form of T: modes of very different speed
    stay apart in it, and those that coincide, as of stages alike, do no harm.

    Raises
    ------
    NumericalError
        A loop of capacitors, or a state space that does not give the response of the nodal
        equations back.
    """
    from scipy.linalg import schur

    shifted = _Shifted.of(structure, board)
    n, order = structure.size, shifted.matrix.shape[1]
    if not np.all(np.isfinite(shifted.poles())):
        raise NumericalError("got a loop of capacitors and sources, expected none in a state space")
    form, turned = schur(shifted.matrix[0], output="real")
    inverse = np.linalg.inv(form)
    entry = shifted.right[:, n] + shifted.right[:, :n] @ shifted.driven[0]
    inward = inverse @ (turned.T @ entry)
    solved = np.concatenate([shifted.solved[0], np.zeros((2, order))])[list(nets)] @ turned
    driven = np.concatenate([shifted.driven[0], [1.0, 0.0]])[list(nets)]
    system = StateSpace(
        shifted.shift * np.eye(order) - inverse, inward, solved @ inverse, driven - solved @ inward
    )
    _check(structure, board, nets, system)
    return system


def _shift(structure: Structure) -> float:
    """A real frequency amid the corners of a circuit [rad/s]."""
    resistances = structure.values[structure.is_resistor]
    capacitances = structure.values[~structure.is_resistor]
    if not (resistances.size and capacitances.size):
        return 1.0
    return float(np.exp(-np.mean(np.log(resistances)) - np.mean(np.log(capacitances))))


def _incidence(structure: Structure) -> tuple[Real, Real]:
    """L (n, r) and R^T (r, n + 2): capacitors first, then op-amps."""
    n = structure.size
    capacitors = np.flatnonzero(~structure.is_resistor)
    count = capacitors.size + len(structure.amplifiers)
    left, right = np.zeros((n, count)), np.zeros((count, n + 2))
    for k, part in enumerate(capacitors):
        p, q = structure.ends[part]
        right[k, p] += 1.0
        right[k, q] -= 1.0
        for net, sign in ((p, 1.0), (q, -1.0)):
            if net < n and net not in structure.driver:
                left[net, k] += sign
    for k, (_, _, out) in enumerate(structure.pins):
        left[out, capacitors.size + k] = right[capacitors.size + k, out] = 1.0
    return left, right


def _matrix_at(structure: Structure, board: Boards, s: complex) -> Complex:
    n = structure.size
    at = np.array([s], dtype=complex)
    y = dense.admittances(structure, at, board.values[:1])
    a = dense.inverse_gains(at, board.gain_bandwidth[0], board.open_loop_gain[0])
    return dense.equations(structure, y, a)[0, :, :n]


def _moved(structure: Structure, board: Boards, s: complex, x: Complex, y: Complex) -> Complex:
    """y^T dM(s) x per ln of every passive and of every gain-bandwidth, shape (P + U,)."""
    volts = np.concatenate([x, np.zeros(2)])
    weight = np.concatenate([y, np.zeros(2)])
    for net in structure.driver:
        weight[net] = 0.0
    values = board.values[0]
    slope = np.where(structure.is_resistor, -1.0 / values, s * values)
    p, q = structure.ends.T
    passives = slope * (weight[p] - weight[q]) * (volts[p] - volts[q])
    out = structure.pins[:, 2]
    amplifiers = y[out] * x[out] * s / (2 * np.pi * board.gain_bandwidth[0])
    return np.concatenate([passives, amplifiers])


def _check(structure: Structure, board: Boards, nets: tuple[int, ...], system: StateSpace) -> None:
    """Hold the modes against the equations at the frequency of every pole."""
    s = 1j * np.unique(np.abs(system.poles))
    y = dense.admittances(structure, s, np.repeat(board.values[:1], s.size, axis=0))
    a = dense.inverse_gains(s, board.gain_bandwidth[0], board.open_loop_gain[0])
    wanted = dense.solve_samples(structure, y, a)[:, list(nets)]
    identity = np.eye(system.order)
    found = np.array([system.C @ np.linalg.solve(p * identity - system.A, system.B) for p in s])
    difference = np.max(np.abs(found + system.D - wanted), axis=0)
    if np.any(difference > AGREEMENT * np.maximum(np.max(np.abs(wanted), axis=0), 1.0)):
        raise NumericalError(
            "the state space of the board does not give its response back: got a difference of "
            f"{float(np.max(difference)):.2g} V per volt, expected almost none"
        )
