"""What a drawing has to join: who drives each net, which resistors read it, the main path.

Cells are counted from 0 in the circuit's order, `BOARD_INPUT` stands for the source.  Between
the source and the board there may be one resistor, from the output to ground there may be
others; everything else belongs to a cell.
"""

from __future__ import annotations

from dataclasses import dataclass

from synth.circuit import GROUND, Cell, Circuit, Passive
from synth.errors import CircuitError

__all__ = ["BOARD_INPUT", "Connections", "Reader", "Signal", "read_connections"]

BOARD_INPUT = -1


@dataclass(frozen=True)
class Reader:
    """An input resistor: the cell it belongs to and its reference."""

    cell: int
    ref: str


@dataclass(frozen=True)
class Signal:
    """A net with its driver, a cell or `BOARD_INPUT`, and its readers."""

    net: str
    driver: int
    readers: tuple[Reader, ...]


@dataclass(frozen=True)
class Connections:
    """A circuit as a drawing sees it.

    Parameters
    ----------
    signals
        By net, in the order of their drivers.
    source
        The resistor between the input and the board, or None.
    loads
        Resistors from the output to ground outside the cells.
    entry
        Net the board sees as its input.
    output_cell
        The cell that drives the output.
    main
        The readers on the path from input to output that keeps closest to the order of the
        cells, by cell.
    """

    circuit: Circuit
    signals: dict[str, Signal]
    source: Passive | None
    loads: tuple[Passive, ...]
    entry: str
    output_cell: int
    main: dict[int, Reader]

    def signal_of(self, driver: int) -> Signal:
        """What a cell, or the source, drives onto the board."""
        net = self.entry if driver == BOARD_INPUT else self.circuit.cells[driver].output
        return self.signals[net]

    def driver_ref(self, signal: Signal) -> str:
        """Reference of the op-amp that drives a net, ``""`` for the board's input."""
        driver = signal.driver
        return "" if driver == BOARD_INPUT else self.circuit.cells[driver].amplifier


def read_connections(circuit: Circuit) -> Connections:
    """The connections of a circuit made of cells.

    Raises
    ------
    CircuitError
        A part or op-amp outside the cells, a cell that is no inverting stage, a net that
        nothing drives.
    """
    if not circuit.cells:
        raise CircuitError("got a circuit without cells, expected one made of cells to draw")
    source, loads = _fixtures(circuit)
    for cell in circuit.cells:
        _check_cell(circuit, cell)
    entry = circuit.input_net
    if source is not None:
        entry = next(n for n in source.nets if n != circuit.input_net)
    drivers = {circuit.input_net: BOARD_INPUT, entry: BOARD_INPUT}
    drivers |= {cell.output: k for k, cell in enumerate(circuit.cells)}
    if circuit.output_net not in drivers or drivers[circuit.output_net] == BOARD_INPUT:
        raise CircuitError(f"got the output net {circuit.output_net!r}, which no cell drives")
    readers: dict[str, list[Reader]] = {net: [] for net in drivers}
    for k, cell in enumerate(circuit.cells):
        for ref in cell.inputs:
            net = circuit.branch(cell, ref).net
            if net not in drivers:
                raise CircuitError(f"{ref}: got the net {net!r}, which no cell drives")
            readers[net].append(Reader(k, ref))
    signals = {net: Signal(net, driver, tuple(readers[net])) for net, driver in drivers.items()}
    output_cell = drivers[circuit.output_net]
    main = _main_path(circuit, signals, output_cell)
    return Connections(circuit, signals, source, loads, entry, output_cell, main)


def _fixtures(circuit: Circuit) -> tuple[Passive | None, tuple[Passive, ...]]:
    """Source resistor and loads."""
    inside = {r for c in circuit.cells for r in c.refs}
    outside = [p for p in circuit.passives if p.ref not in inside]
    outputs = {c.output for c in circuit.cells}
    summing = {net for c in circuit.cells for net in (c.summing, c.plus)}
    load_nets = {circuit.output_net, GROUND}
    loads = [p for p in outside if set(p.nets) == load_nets and p.kind == "resistor"]
    sources = [
        p
        for p in outside
        if circuit.input_net in p.nets
        and p.kind == "resistor"
        and not set(p.nets) & (outputs | summing | {GROUND})
    ]
    stray = [p.ref for p in outside if p not in loads and p not in sources[:1]]
    stray += [
        a.ref for a in circuit.amplifiers if a.ref not in {c.amplifier for c in circuit.cells}
    ]
    if stray:
        raise CircuitError(
            f"got parts outside the cells: {', '.join(stray)}; expected every part in a cell, "
            "but for a source resistor and a load"
        )
    return (sources[0] if sources else None), tuple(loads)


def _check_cell(circuit: Circuit, cell: Cell) -> None:
    """Refuse a cell that is not a stage around one op-amp with feedback to its inverting input."""
    amplifier = next((a for a in circuit.amplifiers if a.ref == cell.amplifier), None)
    if amplifier is None:
        raise CircuitError(f"cell {cell.block}: unknown op-amp {cell.amplifier!r}")
    wanted = (cell.plus, cell.summing, cell.output)
    got = (amplifier.plus, amplifier.minus, amplifier.output)
    if got != wanted:
        raise CircuitError(
            f"cell {cell.block}: got {amplifier.ref} between nets {', '.join(got)}, "
            f"expected {', '.join(wanted)}"
        )
    feedback = circuit.by_ref[cell.feedback]
    if set(feedback.nets) != {cell.summing, cell.output}:
        raise CircuitError(
            f"cell {cell.block}: got {feedback.ref} between {' and '.join(feedback.nets)}, "
            f"expected {cell.summing} and {cell.output}"
        )
    if not cell.inputs:
        raise CircuitError(f"cell {cell.block}: got no input resistor, expected at least one")
    for ref in cell.inputs:
        part = circuit.by_ref[ref]
        if part.kind != "resistor" or cell.node_of(part) not in part.nets:
            raise CircuitError(
                f"cell {cell.block}: got the {part.kind} {ref} between "
                f"{' and '.join(part.nets)}, expected a resistor into {cell.summing}"
            )


def _main_path(circuit: Circuit, signals: dict[str, Signal], output_cell: int) -> dict[int, Reader]:
    """Backwards from the output, each time to the nearest earlier driver."""
    feeds: dict[int, list[tuple[int, Reader]]] = {}
    for signal in signals.values():
        for reader in signal.readers:
            feeds.setdefault(reader.cell, []).append((signal.driver, reader))
    main: dict[int, Reader] = {}
    here = output_cell
    while here != BOARD_INPUT:
        earlier = [(d, r) for d, r in feeds[here] if d < here]
        if not earlier:
            break
        driver, reader = max(earlier, key=lambda each: each[0])
        main[here] = reader
        here = driver
    return main
