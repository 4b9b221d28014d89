"""A circuit compiled once, then solved for many boards and frequencies.

Voltages are per volt at the input net.  Arrays have the axes (boards, frequencies, nets), in
this order, less those that were not asked for.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.circuit import Circuit
from synth.errors import CircuitError
from synth.nodal import dense
from synth.nodal.noise import Noise, noise_from
from synth.nodal.offsets import Offsets, offsets_of
from synth.nodal.sensitivity import Adjoint, Sensitivities, sensitivities_from
from synth.nodal.structure import Structure, structure_of

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
        frequency = checked_frequency(frequency_hz)
        parts = self._checked("values", values, self.structure.values)
        gbw = self._checked("gain_bandwidth", gain_bandwidth, self.structure.gain_bandwidth)
        gain = self._checked("open_loop_gain", open_loop_gain, self.structure.open_loop_gain)
        batched = any(array.ndim == 2 for array in (parts, gbw, gain))
        boards = _common_boards(parts, gbw, gain)
        columns = [self.structure.column(n) for n in nets] if nets is not None else []
        s = np.tile(_laplace(frequency), boards)

        def samples(array: Real) -> Real:
            wide = np.broadcast_to(array, (boards, array.shape[-1]))
            return np.repeat(wide, frequency.size, axis=0)

        y = dense.admittances(self.structure, s, samples(parts))
        a = dense.inverse_gains(s, samples(gbw), samples(gain))
        solved = dense.solve_samples(self.structure, y, a)
        picked = solved[:, self.structure.output] if nets is None else solved[:, columns]
        shaped = picked.reshape(boards, frequency.size, *picked.shape[1:])
        return shaped if batched else shaped[0]

    def adjoint(self, frequency_hz: ArrayLike, *, values: ArrayLike | None, column: int) -> Adjoint:
        """Forward and transposed solution of one board, observing net `column`."""
        structure, n = self.structure, self.structure.size
        frequency = checked_frequency(frequency_hz)
        s = _laplace(frequency)
        y = dense.admittances(structure, s, self._one_board(values)[None, :])
        a = dense.inverse_gains(s, structure.gain_bandwidth, structure.open_loop_gain)
        psi = np.zeros((frequency.size, n + 2), dtype=complex)
        if column < n:
            matrix = dense.equations(structure, y, a)[:, :, :n]
            right = np.zeros((frequency.size, n, 1), dtype=complex)
            right[:, column] = 1.0
            psi[:, :n] = dense.solve_rows(matrix, right, transposed=True)[:, :, 0]
        outputs = structure.pins[:, 2]
        amplifiers = psi[:, outputs]
        psi[:, outputs] = 0.0
        return Adjoint(dense.solve_samples(structure, y, a), psi, amplifiers)

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
            self.adjoint(frequency, values=parts, column=column),
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
        temperature: float = 300.15,
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
        column = self.structure.output if net is None else self.structure.column(net)
        figures = [a.figures for a in self.circuit.amplifiers]
        return noise_from(
            self.structure,
            self.adjoint(frequency, values=parts, column=column),
            frequency_hz=frequency,
            values=parts,
            temperature=temperature,
            voltage_noise=np.array([f.voltage_noise for f in figures]),
            current_noise=np.array([f.current_noise for f in figures]),
        )

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
        parts = self._checked("values", values, self.structure.values)
        if parts.ndim != 1:
            raise CircuitError(f"got values of shape {parts.shape}, expected one board")
        return parts

    def _checked(self, name: str, given: ArrayLike | None, nominal: Real) -> Real:
        """`given` as an array of shape (K,) or (boards, K), K the size of `nominal`."""
        if given is None:
            return nominal
        array = np.asarray(given, dtype=float)
        if array.ndim == 0 and name != "values":
            array = np.full(nominal.size, float(array))
        if array.ndim not in (1, 2) or array.shape[-1] != nominal.size:
            raise CircuitError(
                f"got {name} of shape {array.shape}, expected ({nominal.size},) or "
                f"(boards, {nominal.size})"
            )
        if not (np.all(array > 0) and np.all(np.isfinite(array))):
            raise CircuitError(f"got {name} that are not all positive and finite")
        return array


def compile_circuit(circuit: Circuit) -> NodalProgram:
    """The nodal program of a circuit.

    Raises
    ------
    CircuitError
        A net that floats, whatever the values are.
    """
    return NodalProgram(circuit, structure_of(circuit))


def checked_frequency(frequency_hz: ArrayLike) -> Real:
    """Frequencies as an array of shape (F,).

    Raises
    ------
    CircuitError
        A frequency that is negative or not finite, or not one axis.
    """
    frequency = np.atleast_1d(np.asarray(frequency_hz, dtype=float))
    if frequency.ndim != 1 or not (np.all(frequency >= 0) and np.all(np.isfinite(frequency))):
        raise CircuitError("got frequencies that are not one row of finite numbers from 0 upward")
    return frequency


def _laplace(frequency: Real) -> Complex:
    """s = j 2 pi f [rad/s]."""
    return np.asarray(2j * np.pi * frequency, dtype=np.complex128)


def _common_boards(*arrays: Real) -> int:
    boards = {array.shape[0] for array in arrays if array.ndim == 2}
    if len(boards) > 1:
        raise CircuitError(f"got arrays for {sorted(boards)} boards, expected one number of boards")
    return boards.pop() if boards else 1
