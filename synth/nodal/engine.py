"""One system with the plan that solves it, and the watch over its accuracy.

The elimination has a fixed order, so nothing pivots when it runs.  Its accuracy is therefore
measured: when a plan is chosen, on the nominal board and on boards far from it, over all
frequencies at which the circuit does anything; when it runs outside what was measured, on a
sample of what it was asked for.  Where a plan fails, LAPACK solves instead: slower, same result.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.errors import NumericalError
from synth.nodal import dense
from synth.nodal.elimination import Plan, plan
from synth.nodal.reduction import Reduction, quantities
from synth.nodal.structure import Structure

__all__ = ["Boards", "Engine", "choose_engine"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

TRUSTED_RATIO = 4.0
"""A plan is measured with parts and op-amps up to this factor from nominal, and trusted there."""

RELATIVE_ERROR = 1e-10
"""Relative error a plan may always have."""

ROUNDING = 64.0
"""... or this many times what one unit of rounding in every entry causes, where that is more."""

TRIES = 12
"""Plans drawn for a system; the cheapest that is accurate enough is taken."""

SAMPLES = 64
"""Samples checked in a call outside the trusted region, and solved at once by LAPACK times 64."""


@dataclass(frozen=True, eq=False)
class Boards:
    """Values of parts and figures of op-amps, board by board.

    `values` (boards, P) [ohm], [F]; `gain_bandwidth` [Hz] and `open_loop_gain` (boards, U).
    """

    values: Real
    gain_bandwidth: Real
    open_loop_gain: Real

    @property
    def count(self) -> int:
        """Number of boards."""
        return int(self.values.shape[0])

    def part(self, start: int, stop: int) -> Boards:
        """Boards start to stop - 1."""
        return Boards(
            self.values[start:stop],
            self.gain_bandwidth[start:stop],
            self.open_loop_gain[start:stop],
        )

    def samples(
        self, structure: Structure, s: Complex, board: NDArray[np.intp], point: NDArray[np.intp]
    ) -> tuple[Complex, Complex]:
        """y and a of `synth.nodal.dense` for pairs of board and frequency index."""
        y = dense.admittances(structure, s[point], self.values[board])
        a = dense.inverse_gains(s[point], self.gain_bandwidth[board], self.open_loop_gain[board])
        return y, a


@dataclass(frozen=True, eq=False)
class Engine:
    """Solves one system for some of its unknowns.

    Parameters
    ----------
    structure
        Of the circuit.
    wanted
        The unknowns, numbered as in the structure.
    observed
        None for the equations themselves; for the transposed ones, the net observed.
    chosen
        The plan, or None where none was accurate enough.
    low, high
        Angular frequencies between which the plan was measured [rad/s].
    """

    structure: Structure
    wanted: tuple[int, ...]
    observed: int | None
    chosen: Plan | None
    low: float
    high: float

    def solve(self, boards: Boards, s: Complex) -> Complex:
        """The wanted unknowns, shape (wanted, boards, F); `s` shape (F,) [rad/s].

        Raises
        ------
        NumericalError
            A singular sample.
        """
        if not (self.wanted and s.size and boards.count):
            return np.zeros((len(self.wanted), boards.count, s.size), dtype=complex)
        if self.chosen is None:
            return self._by_lapack(boards, s)
        quantity = quantities(
            self.structure, boards.values, boards.gain_bandwidth, boards.open_loop_gain
        )
        with np.errstate(all="ignore"):
            solved = self.chosen.solve(quantity, s)
        if not self._is_trusted(boards, s):
            board, point = _spread(boards.count, s.size)
            if not self._agrees(boards, s, board, point, solved[:, board, point].T):
                return self._by_lapack(boards, s)
        if not np.isfinite(solved.sum()):
            board, point = np.nonzero(~np.isfinite(solved).all(axis=0))
            solved[:, board, point] = self._samples_by_lapack(boards, s, board, point).T
        return solved

    def _is_trusted(self, boards: Boards, s: Complex) -> bool:
        size = np.abs(s)
        if size.min() < self.low or size.max() > self.high:
            return False
        own = self.structure
        pairs = (
            (boards.values, own.values),
            (boards.gain_bandwidth, own.gain_bandwidth),
            (boards.open_loop_gain, own.open_loop_gain),
        )
        return all(
            bool(np.all(given <= nominal * TRUSTED_RATIO))
            and bool(np.all(given * TRUSTED_RATIO >= nominal))
            for given, nominal in pairs
        )

    def _agrees(
        self,
        boards: Boards,
        s: Complex,
        board: NDArray[np.intp],
        point: NDArray[np.intp],
        solved: Complex,
    ) -> bool:
        """Whether `solved`, shape (samples, wanted), is as accurate as it can be asked to be."""
        y, a = boards.samples(self.structure, s, board, point)
        exact, rounding = dense.reference(self.structure, y, a, observed=self.observed)
        columns = list(self.wanted)
        exact, rounding = exact[:, columns], rounding[:, columns]
        allowed = np.maximum(RELATIVE_ERROR, ROUNDING * rounding)
        with np.errstate(all="ignore"):
            close = np.abs(solved - exact) <= allowed * np.abs(exact)
        # An unknown that is 0 by a balance of parts rather than by structure carries no scale.
        return bool(np.all(close | ~np.isfinite(rounding)))

    def _by_lapack(self, boards: Boards, s: Complex) -> Complex:
        out = np.empty((len(self.wanted), boards.count, s.size), dtype=complex)
        step = max(1, SAMPLES * 64 // s.size)
        for start in range(0, boards.count, step):
            part = boards.part(start, start + step)
            board, point = np.indices((part.count, s.size)).reshape(2, -1)
            solved = self._samples_by_lapack(part, s, board, point)
            out[:, start : start + step] = solved.T.reshape(-1, part.count, s.size)
        return out

    def _samples_by_lapack(
        self, boards: Boards, s: Complex, board: NDArray[np.intp], point: NDArray[np.intp]
    ) -> Complex:
        y, a = boards.samples(self.structure, s, board, point)
        if self.observed is None:
            solved = dense.solve_samples(self.structure, y, a)
        else:
            solved = dense.solve_transposed(self.structure, y, a, self.observed)
        return solved[:, list(self.wanted)]


def choose_engine(
    structure: Structure,
    system: Reduction,
    wanted: tuple[int, ...],
    *,
    observed: int | None = None,
) -> Engine:
    """The engine with the cheapest plan that is accurate on every board it is measured on."""
    low, high = _active_range(structure)
    if not set(wanted) <= set(system.columns):
        return Engine(structure, wanted, observed, None, low, high)
    boards = _test_boards(structure)
    s = np.asarray(1j * np.geomspace(low, high, 24), dtype=np.complex128)
    board, point = (k.ravel() for k in np.indices((boards.count, s.size)))
    drawn = [plan(system, wanted, np.random.default_rng(k)) for k in range(TRIES)]
    for candidate in sorted(drawn, key=lambda p: p.tape.cost):
        engine = Engine(structure, wanted, observed, candidate, low * 0.999, high * 1.001)
        quantity = quantities(
            structure, boards.values, boards.gain_bandwidth, boards.open_loop_gain
        )
        with np.errstate(all="ignore"):
            solved = candidate.solve(quantity, s)
        try:
            if engine._agrees(boards, s, board, point, solved[:, board, point].T):
                return engine
        except NumericalError:
            break
    return Engine(structure, wanted, observed, None, low, high)


def _active_range(structure: Structure) -> tuple[float, float]:
    """Angular frequencies that hold every corner of the circuit, with two decades to spare."""
    resistances = structure.values[structure.is_resistor]
    capacitances = structure.values[~structure.is_resistor]
    corners = [2 * np.pi * structure.gain_bandwidth]
    corners.append(corners[0] / structure.open_loop_gain)
    if resistances.size and capacitances.size:
        corners.append(1.0 / np.multiply.outer(resistances, capacitances).ravel())
    found = np.concatenate(corners)
    if not found.size:
        return 1.0, 1e9
    return float(found.min()) / 100, float(found.max()) * 100


def _test_boards(structure: Structure, count: int = 6) -> Boards:
    """The nominal board and others up to the trusted ratio away, always the same ones."""
    generator = np.random.default_rng(20)

    def around(nominal: Real) -> Real:
        exponent = generator.uniform(-1, 1, (count, nominal.size))
        exponent[0] = 0.0
        return np.asarray(nominal * TRUSTED_RATIO**exponent)

    return Boards(
        around(structure.values),
        around(structure.gain_bandwidth),
        around(structure.open_loop_gain),
    )


def _spread(boards: int, frequencies: int) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Pairs of board and frequency index spread over all samples, ends included."""
    total = boards * frequencies
    flat = np.unique(np.linspace(0, total - 1, min(SAMPLES, total)).round().astype(np.intp))
    return flat // frequencies, flat % frequencies
