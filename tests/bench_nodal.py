"""Benchmark of the nodal engine against ngspice in-process: ``python -m tests.bench_nodal``.

Both compute the response of the same boards, parts drawn within tolerance, at the same
frequencies: ngspice with `alter` and `ac` on a loaded deck, the engine with all boards in a call.
"""

from __future__ import annotations

import sys
import time
from dataclasses import dataclass

import numpy as np

from netlist.deck import board_deck
from netlist.ngspice import Simulator
from synth.circuit import Circuit
from synth.nodal import compile_circuit
from synth.tolerance import drawn_values
from tests.synth.nodal.boards import chain, op_amp

__all__ = ["Row", "bench"]


@dataclass(frozen=True)
class Row:
    """One comparison; times per board [s], the engine's with and without its set-up."""

    op_amps: int
    frequencies: int
    boards: int
    ngspice: float
    engine: float
    set_up: float
    largest_difference: float

    @property
    def ratio(self) -> float:
        """How many times faster the engine is."""
        return self.ngspice / self.engine

    def __str__(self) -> str:
        return (
            f"nodal engine: {self.op_amps} op-amps, {self.frequencies} frequencies: "
            f"{1e6 * self.engine:.1f} us a board ({self.boards} boards), ngspice alter loop "
            f"{1e6 * self.ngspice:.0f} us, {self.ratio:.0f} times faster; set-up "
            f"{1e3 * self.set_up:.0f} ms; they differ by {self.largest_difference:.1e} of |H|"
        )


def bench(circuit: Circuit | None = None, *, boards: int = 2000, simulated: int = 100) -> Row:
    """Time both on `circuit` (None: nine op-amps, order 6) over four decades."""
    circuit = circuit or chain(6, op_amp(), source=50.0, load=10e3)
    deck = board_deck(circuit, title="bench", start_hz=10.0, stop_hz=1e5, points_per_decade=50)
    values = drawn_values(circuit, boards, 1)
    with Simulator() as simulator:
        f = simulator.ac(deck, ["out"]).frequency_hz
        refs = [p.ref for p in circuit.passives]
        changes = [dict(zip(refs, board, strict=True)) for board in values[:simulated]]
        simulator.alter_ac(deck, changes[:3], "out")
        start = time.perf_counter()
        expected = simulator.alter_ac(deck, changes, "out")
        by_ngspice = (time.perf_counter() - start) / simulated
    start = time.perf_counter()
    program = compile_circuit(circuit)
    found = program.solve(f, values=values)
    first = time.perf_counter() - start
    engine = []
    for _ in range(3):
        start = time.perf_counter()
        found = program.solve(f, values=values)
        engine.append(time.perf_counter() - start)
    difference = np.abs(found[:simulated] / expected - 1).max()
    return Row(
        op_amps=len(circuit.amplifiers),
        frequencies=f.size,
        boards=boards,
        ngspice=by_ngspice,
        engine=min(engine) / boards,
        set_up=first - min(engine),
        largest_difference=float(difference),
    )


if __name__ == "__main__":
    for order in (2, 6, 8):
        sys.stdout.write(f"{bench(chain(order, op_amp(), source=50.0, load=10e3))}\n")
