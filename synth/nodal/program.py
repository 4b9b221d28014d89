"""A circuit compiled once, then solved for many boards and frequencies.

Voltages are per volt at the input net.  Arrays have the axes (boards, frequencies, nets), in
this order, less those that were not asked for.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.circuit import Circuit
from synth.constants import TEMPERATURE
from synth.errors import CircuitError
from synth.nodal import dense
from synth.nodal.adjoint import Adjoint, all_voltages, completed
from synth.nodal.arguments import checked_columns, checked_frequency, common_boards
from synth.nodal.engine import LazyEngine
from synth.nodal.noise import Noise, noise_from
from synth.nodal.offsets import Offsets, offsets_of
from synth.nodal.reduction import Reduction, reduce
from synth.nodal.region import Boards
from synth.nodal.sensitivity import Sensitivities, sensitivities_from
from synth.nodal.states import natural_frequencies, pole_slopes, state_space
from synth.nodal.structure import Structure, structure_of
from synth.statespace import StateSpace

__all__ = ["NodalProgram", "compile_circuit"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class NodalProgram:
    """The nodal equations of a circuit, ready to be solved.  Build one with `compile_circuit`.

    Parameters
    ----------
    circuit
        The circuit it was compiled from: nominal values and figures.
    structure
        Its connections as index arrays.
    """

    circuit: Circuit
    structure: Structure

    @property
    def refs(self) -> tuple[str, ...]:
        """References of all passives in circuit order: the columns of `values`."""
        return self.structure.refs

    @property
    def amplifiers(self) -> tuple[str, ...]:
        """References of all op-amps in circuit order: the columns of their figures."""
        return self.structure.amplifiers

    @property
    def nets(self) -> tuple[str, ...]:
        """All nets but ground."""
        return self.structure.nets[:-1]

    def solve(
        self,
        frequency_hz: ArrayLike,
        *,
        values: ArrayLike | None = None,
        gain_bandwidth: ArrayLike | None = None,
        open_loop_gain: ArrayLike | None = None,
        nets: Sequence[str] | None = None,
    ) -> Complex:
        """Response of the output net, or of `nets`, to 1 V at the input.

        Parameters
        ----------
        frequency_hz
            Frequencies [Hz], shape (F,), zero or positive.
        values
            Values of the passives in order of `refs` [ohm], [F]: shape (P,) for one board,
            (boards, P) for many; None for the nominal ones.
        gain_bandwidth, open_loop_gain
            Figures of the op-amps in order of `amplifiers` [Hz], [V/V]: a scalar for all,
            shape (U,), or (boards, U); None for those of the circuit.
        nets
            Names of nets; None for the output alone.

        Returns
        -------
        Shape (boards, F) without `nets`, (boards, F, len(nets)) with them.  The first axis is
        there when any argument has one.

        Raises
        ------
        CircuitError
            An unknown net, an array of the wrong shape, or a value that is not positive.
        NumericalError
            The equations are singular at a sample.
        """
        structure = self.structure
        frequency = checked_frequency(frequency_hz)
        boards, count = self._boards(values, gain_bandwidth, open_loop_gain)
        solved: Complex
        if nets is None:
            solved = self._voltages((structure.output,), boards, frequency)[0]
        else:
            columns = tuple(structure.column(net) for net in nets)
            solved = np.moveaxis(self._voltages(columns, boards, frequency), 0, -1)
        return solved if count else np.asarray(solved[0])

    def _boards(
        self,
        values: ArrayLike | None,
        gain_bandwidth: ArrayLike | None,
        open_loop_gain: ArrayLike | None,
    ) -> tuple[Boards, int]:
        """The boards asked for, and how many; one, and 0, where no argument has an axis of them."""
        structure = self.structure
        parts = checked_columns("values", values, structure.values)
        gbw = checked_columns("gain_bandwidth", gain_bandwidth, structure.gain_bandwidth)
        gain = checked_columns("open_loop_gain", open_loop_gain, structure.open_loop_gain)
        count = common_boards(parts, gbw, gain) or 0
        arrays = (np.broadcast_to(a, (count or 1, a.shape[-1])) for a in (parts, gbw, gain))
        return Boards(*arrays), count

    def _voltages(self, columns: tuple[int, ...], boards: Boards, frequency: Real) -> Complex:
        """Voltages of nets, shape (nets, boards, F)."""
        own, n, s = self._reduction, self.structure.size, _laplace(frequency)
        unknown = tuple(sorted({c for c in columns if c < n}))
        if not set(unknown) <= set(own.columns):
            return self._all_voltages(boards, s)[list(columns)]
        solved = self._engine(unknown).solve(boards, s)
        if columns == unknown:
            return solved
        out = np.zeros((len(columns), boards.count, frequency.size), dtype=complex)
        for k, column in enumerate(columns):
            if column < n:
                out[k] = solved[unknown.index(column)]
            elif column == n:
                out[k] = 1.0
        return out

    def _all_voltages(self, boards: Boards, s: Complex) -> Complex:
        """Voltages of all nets, those at op-amp inputs too, shape (n + 2, boards, F)."""
        own = self._reduction
        solved = self._engine(own.columns).solve(boards, s)
        board, point = np.indices((boards.count, s.size)).reshape(2, -1)
        a = dense.inverse_gains(
            s[point], boards.gain_bandwidth[board], boards.open_loop_gain[board]
        )
        voltages = all_voltages(self.structure, own, solved.reshape(solved.shape[0], -1).T, a)
        return voltages.T.reshape(-1, boards.count, s.size)

    def _engine(self, unknown: tuple[int, ...], observed: int | None = None) -> LazyEngine:
        """The engine for some unknowns of the equations, or of the transposed ones."""
        key = (unknown, observed)
        if key not in self._engines:
            own = self._reduction
            system = own if observed is None else own.transposed(observed)
            self._engines[key] = LazyEngine(self.structure, system, unknown, observed=observed)
        return self._engines[key]

    @cached_property
    def _engines(self) -> dict[tuple[tuple[int, ...], int | None], LazyEngine]:
        return {}

    @cached_property
    def _reduction(self) -> Reduction:
        return reduce(self.structure)

    def adjoint(
        self, frequency_hz: ArrayLike, *, values: ArrayLike | None = None, net: str | None = None
    ) -> Adjoint:
        """Forward and transposed solution of one board, observing `net` (None: the output).

        Raises
        ------
        CircuitError, NumericalError
            As `solve`.
        """
        structure = self.structure
        n, own = structure.size, self._reduction
        column = structure.output if net is None else structure.column(net)
        parts = self._one_board(values)
        s = _laplace(checked_frequency(frequency_hz))
        boards = Boards(
            parts[None, :], structure.gain_bandwidth[None, :], structure.open_loop_gain[None, :]
        )
        y = dense.admittances(structure, s, parts[None, :])
        a = dense.inverse_gains(s, structure.gain_bandwidth, structure.open_loop_gain)
        voltages = self._engine(own.columns).solve(boards, s)[:, 0].T
        if column in own.columns:
            psi = self._engine(own.rows, column).solve(boards, s)[:, 0].T
        elif column < n:
            psi = dense.solve_transposed(structure, y, a, column)[:, list(own.rows)]
        else:
            psi = np.zeros((s.size, len(own.rows)), dtype=complex)
        return completed(structure, own, column, y=y, a=a, voltages=voltages, psi=psi)

    def sensitivities(
        self, frequency_hz: ArrayLike, *, values: ArrayLike | None = None, net: str | None = None
    ) -> Sensitivities:
        """Relative sensitivities of the response of `net` (None: the output) to every part.

        `values` shape (P,), None for the nominal ones; op-amps as in the circuit.

        Raises
        ------
        CircuitError
            As `solve`.
        NumericalError
            The equations are singular, or the response is 0, at a frequency.
        """
        structure = self.structure
        frequency = checked_frequency(frequency_hz)
        column = structure.output if net is None else structure.column(net)
        parts = self._one_board(values)
        return sensitivities_from(
            structure,
            self.adjoint(frequency, values=parts, net=net),
            column,
            frequency_hz=frequency,
            y=dense.admittances(structure, _laplace(frequency), parts[None, :]),
            gain_bandwidth=structure.gain_bandwidth,
            open_loop_gain=structure.open_loop_gain,
        )

    def noise(
        self,
        frequency_hz: ArrayLike,
        *,
        temperature: float = TEMPERATURE,
        values: ArrayLike | None = None,
        net: str | None = None,
    ) -> Noise:
        """Noise power density at `net` (None: the output), part by part.

        `temperature` in [K] (the default is ngspice's, 27 C), `values` shape (P,).

        Raises
        ------
        CircuitError, NumericalError
            As `solve`.
        """
        frequency = checked_frequency(frequency_hz)
        parts = self._one_board(values)
        figures = [a.figures for a in self.circuit.amplifiers]
        return noise_from(
            self.structure,
            self.adjoint(frequency, values=parts, net=net),
            frequency_hz=frequency,
            values=parts,
            temperature=temperature,
            voltage_noise=np.array([f.voltage_noise for f in figures]),
            current_noise=np.array([f.current_noise for f in figures]),
        )

    def poles(
        self,
        *,
        values: ArrayLike | None = None,
        gain_bandwidth: ArrayLike | None = None,
        open_loop_gain: ArrayLike | None = None,
    ) -> Complex:
        """Natural frequencies [rad/s]: as many as capacitors and op-amps, inf for what is none.

        Arguments as of `solve`; shape (r,), or (boards, r) when any of them has boards.

        Raises
        ------
        CircuitError, NumericalError
            As `solve`.
        """
        boards, count = self._boards(values, gain_bandwidth, open_loop_gain)
        found = natural_frequencies(self.structure, boards)
        return found if count else np.asarray(found[0])

    def pole_slopes(self) -> tuple[Complex, Complex]:
        """Poles of the nominal board, shape (r,), and their slopes over ln of every passive and of
        every op-amp's gain-bandwidth, shape (r, P + U) [rad/s]; errors as of `solve`."""
        return pole_slopes(self.structure, self._boards(None, None, None)[0])

    def state_space(self, nets: Sequence[str]) -> StateSpace:
        """The nominal board from its input to the voltages of `nets`.

        Raises
        ------
        CircuitError
            An unknown net.
        NumericalError
            A loop of capacitors, or a state space that does not give the response back.
        """
        columns = tuple(self.structure.column(net) for net in nets)
        return state_space(self.structure, self._boards(None, None, None)[0], columns)

    def dc_offsets(self, *, values: ArrayLike | None = None) -> Offsets:
        """What offsets and bias currents do to every op-amp output at DC, the input at 0 V.

        Raises
        ------
        CircuitError, NumericalError
            As `solve`.
        """
        figures = [a.figures for a in self.circuit.amplifiers]
        return offsets_of(
            self.structure,
            values=self._one_board(values),
            open_loop_gain=self.structure.open_loop_gain,
            offset=np.array([f.offset for f in figures]),
            bias_current=np.array([f.bias_current for f in figures]),
        )

    def _one_board(self, values: ArrayLike | None) -> Real:
        parts = checked_columns("values", values, self.structure.values)
        if parts.ndim != 1:
            raise CircuitError(f"got values of shape {parts.shape}, expected one board")
        return parts


def compile_circuit(circuit: Circuit) -> NodalProgram:
    """The nodal program of a circuit.

    Raises
    ------
    CircuitError
        A net that floats, whatever the values are.
    """
    return NodalProgram(circuit, structure_of(circuit))


def _laplace(frequency: Real) -> Complex:
    """s = j 2 pi f [rad/s]."""
    return np.asarray(2j * np.pi * frequency, dtype=np.complex128)
