"""DC errors: what offset voltages and bias currents do to every op-amp output.

The input is at 0 V.  An op-amp with finite gain keeps even a bare integrator regular: its output
then stands at A0 times the offset, which says that only a loop around it fixes its level.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.nodal import dense
from synth.nodal.structure import Structure

__all__ = ["Offsets", "offsets_of"]

Real = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Offsets:
    """DC response of op-amp outputs to the imperfections of op-amp inputs.

    Row i is the output net of op-amp i, column k the op-amp whose input is imperfect; all arrays
    have shape (U, U).

    Parameters
    ----------
    nets
        Output nets.
    voltage_gain
        Volts at the output per volt in series with the + input, a ratio.
    plus_gain, minus_gain
        Volts at the output per ampere that flows *into* the + or - input [ohm].
    offset, bias_current
        Magnitudes of the op-amps' figures [V], [A], shape (U,).
    """

    nets: tuple[str, ...]
    voltage_gain: Real
    plus_gain: Real
    minus_gain: Real
    offset: Real
    bias_current: Real

    @property
    def worst(self) -> Real:
        """Largest magnitude at every output [V], shape (U,): each offset of either sign, and
        each of the two bias currents of either sign, as bias-cancelled inputs have them."""
        by_current = np.abs(self.plus_gain) + np.abs(self.minus_gain)
        return np.asarray(np.abs(self.voltage_gain) @ self.offset + by_current @ self.bias_current)

    @property
    def worst_equal_bias(self) -> Real:
        """The same with equal bias currents into both inputs of an op-amp [V], shape (U,): what a
        balancing resistor at the + input takes away is taken away here."""
        by_current = np.abs(self.plus_gain + self.minus_gain)
        return np.asarray(np.abs(self.voltage_gain) @ self.offset + by_current @ self.bias_current)


def offsets_of(
    structure: Structure,
    *,
    values: Real,
    open_loop_gain: Real,
    offset: Real,
    bias_current: Real,
) -> Offsets:
    """DC errors with values shape (P,) and figures shape (U,).

    Raises
    ------
    NumericalError
        A net that only capacitors hold: its DC level is not defined.
    """
    n, count = structure.size, len(structure.amplifiers)
    zero = np.zeros(1, dtype=complex)
    y = dense.admittances(structure, zero, values[None, :])
    matrix = dense.equations(structure, y, (1.0 / open_loop_gain)[None, :].astype(complex))
    # Columns: a voltage in series with + (v+ + e - v- = a v), a current into + and into -.
    right = np.zeros((1, n, 3 * count), dtype=complex)
    for k, (plus, minus, out) in enumerate(structure.pins):
        right[0, out, k] = -1.0
        for pin, column in ((plus, count + k), (minus, 2 * count + k)):
            if pin < n and pin not in structure.driver:
                right[0, pin, column] -= 1.0
    solved = dense.solve_rows(matrix[:, :, :n], right)[0].real
    gains = solved[structure.pins[:, 2]]
    return Offsets(
        nets=tuple(structure.nets[k] for k in structure.pins[:, 2]),
        voltage_gain=gains[:, :count],
        plus_gain=gains[:, count : 2 * count],
        minus_gain=gains[:, 2 * count :],
        offset=offset,
        bias_current=bias_current,
    )
