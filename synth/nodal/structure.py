"""A circuit as index arrays: what the nodal equations need and nothing else.

Conventions of every file in this package.  Known voltages are 0 V at ground and 1 V at the
input net; every other net is an unknown.  Unknowns are numbered 0..n-1, the input is column
n and ground column n+1 of any array over nets.  Row i of the equations belongs to unknown
net i:

- where no op-amp drives the net, Kirchhoff's current law: the sum of the currents that leave
  the net through resistors and capacitors is 0 [A];
- where op-amp k drives it, the op-amp's equation v(+) - v(-) - a_k v(out) = 0 [V], with
  a_k = 1/A(s) = 1/A0 + s/(2 pi GBW): one pole, zero output resistance, no input current.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.circuit import GROUND, Circuit
from synth.errors import CircuitError

__all__ = ["Structure", "Wiring", "structure_of"]


@dataclass(frozen=True)
class Wiring:
    """What of a structure does not depend on values or names; circuits alike share it.

    `size` is the number of unknown nets; the others are as in `Structure`.
    """

    size: int
    ends: tuple[tuple[int, ...], ...]
    is_resistor: tuple[bool, ...]
    pins: tuple[tuple[int, ...], ...]
    output: int

    @cached_property
    def driver(self) -> dict[int, int]:
        """Op-amp that drives a net, by column."""
        return {pins[2]: k for k, pins in enumerate(self.pins)}


@dataclass(frozen=True, eq=False)
class Structure:
    """Who is connected to whom.

    Parameters
    ----------
    nets
        Unknown nets in order, then the input net and ground; shape n + 2.
    refs, amplifiers
        References of passives (P) and op-amps (U), in circuit order.
    ends
        The two nets of every passive, shape (P, 2).
    is_resistor
        Shape (P,); the others are capacitors.
    values
        Nominal values [ohm], [F], shape (P,).
    pins
        Nets at +, - and the output of every op-amp, shape (U, 3).
    gain_bandwidth, open_loop_gain
        Nominal figures [Hz], [V/V], shape (U,).
    output
        The output net.
    """

    nets: tuple[str, ...]
    refs: tuple[str, ...]
    amplifiers: tuple[str, ...]
    ends: NDArray[np.intp]
    is_resistor: NDArray[np.bool_]
    values: NDArray[np.float64]
    pins: NDArray[np.intp]
    gain_bandwidth: NDArray[np.float64]
    open_loop_gain: NDArray[np.float64]
    output: int

    @property
    def size(self) -> int:
        """Number n of unknown nets."""
        return len(self.nets) - 2

    @cached_property
    def number_of(self) -> dict[str, int]:
        """Column of a net by its name."""
        return {net: k for k, net in enumerate(self.nets)}

    @cached_property
    def driver(self) -> dict[int, int]:
        """Op-amp that drives a net, by column."""
        return self.wiring.driver

    @cached_property
    def wiring(self) -> Wiring:
        """What depends neither on values nor on names."""
        return Wiring(
            size=self.size,
            ends=tuple(map(tuple, self.ends.tolist())),
            is_resistor=tuple(self.is_resistor.tolist()),
            pins=tuple(map(tuple, self.pins.tolist())),
            output=self.output,
        )

    def column(self, net: str) -> int:
        """Column of a net.

        Raises
        ------
        CircuitError
            There is no such net.
        """
        if net not in self.number_of:
            raise CircuitError(f"got the net {net!r}, expected one of {', '.join(self.nets)}")
        return self.number_of[net]


def structure_of(circuit: Circuit) -> Structure:
    """The index arrays of a circuit.

    Raises
    ------
    CircuitError
        A group of nets that no resistor or capacitor ties to ground, the input or an op-amp
        output.  Nothing else makes the equations singular whatever the values are: with
        every op-amp a source of finite gain, the passive network determines the other nets.
    """
    known = (circuit.input_net, GROUND)
    nets = (*(n for n in circuit.connections if n not in known), *known)
    number = {net: k for k, net in enumerate(nets)}
    passives, amplifiers = circuit.passives, circuit.amplifiers
    for part in passives:
        if part.kind not in ("resistor", "capacitor"):
            raise CircuitError(
                f"{part.ref}: got kind {part.kind!r}, expected 'resistor' or 'capacitor'"
            )
    structure = Structure(
        nets=nets,
        refs=tuple(p.ref for p in passives),
        amplifiers=tuple(a.ref for a in amplifiers),
        ends=np.array([[number[n] for n in p.nets] for p in passives], dtype=np.intp).reshape(
            -1, 2
        ),
        is_resistor=np.array([p.kind == "resistor" for p in passives], dtype=bool),
        values=np.array([p.value for p in passives], dtype=float),
        pins=np.array(
            [[number[a.plus], number[a.minus], number[a.output]] for a in amplifiers],
            dtype=np.intp,
        ).reshape(-1, 3),
        gain_bandwidth=np.array([a.figures.gain_bandwidth for a in amplifiers], dtype=float),
        open_loop_gain=np.array([a.figures.open_loop_gain for a in amplifiers], dtype=float),
        output=number[circuit.output_net],
    )
    _refuse_floating(structure, circuit)
    return structure


def _refuse_floating(structure: Structure, circuit: Circuit) -> None:
    tied = {structure.size, structure.size + 1, *structure.driver}
    ends = [(int(p), int(q)) for p, q in structure.ends]
    grown = True
    while grown:
        found = {p for p, q in ends if q in tied} | {q for p, q in ends if p in tied}
        grown = not found <= tied
        tied |= found
    for k, net in enumerate(structure.nets[: structure.size]):
        if k not in tied:
            refs = ", ".join(circuit.connections[net])
            raise CircuitError(
                f"net {net!r} floats: got only {refs} on it, expected a path through resistors "
                "or capacitors to ground, the input or an op-amp output"
            )
