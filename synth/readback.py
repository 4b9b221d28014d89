"""From a circuit's values back to a block graph: what the parts really ask for.

Every cell becomes a block with the weights its parts set, ideal op-amps assumed: an
integrator -1/(R C) for each input, an adder or inverter -R_f/R, a difference cell also
(1 + R_f/R_p) G/sum G for each input at the non-inverting side, R_p all resistors at the other
side in parallel.  The voltages are those of the op-amp outputs, signs included, so this is also
the check that mapping and values are what the mathematics meant.
"""

from __future__ import annotations

from synth.circuit import Cell, Circuit
from synth.errors import CircuitError
from synth.graph import INPUT, Block, BlockGraph, Term

__all__ = ["block_names", "graph_of"]


def block_names(circuit: Circuit) -> dict[str, str]:
    """The block name `graph_of` gives to each op-amp output net."""
    return {cell.output: f"v{k}" for k, cell in enumerate(circuit.cells, start=1)}


def graph_of(circuit: Circuit) -> BlockGraph:
    """The block graph of a circuit made of cells, one block a cell, from net ``in``.

    Raises
    ------
    CircuitError
        The circuit is not made of cells.
    """
    names = block_names(circuit)
    if circuit.output_net not in names:
        raise CircuitError(f"no cell drives net {circuit.output_net!r}")
    drop = _source_drop(circuit)
    blocks = []
    for cell in circuit.cells:
        is_integrator = circuit.by_ref[cell.feedback].kind == "capacitor"
        weights: dict[str, float] = {}
        for net, weight in _gains(circuit, cell, drop):
            source = names.get(net, INPUT)
            weights[source] = weights.get(source, 0.0) + weight
        terms = tuple(Term(source, weight) for source, weight in weights.items())
        kind = "integrator" if is_integrator else "adder"
        blocks.append(Block(names[cell.output], kind, terms))
    return BlockGraph("readback", tuple(blocks), names[circuit.output_net])


def _gains(circuit: Circuit, cell: Cell, drop: float) -> list[tuple[str, float]]:
    """Source net and weight of every input; `drop` makes a resistor behind the source larger by
    what the source's own resistance adds."""
    feedback = circuit.by_ref[cell.feedback]
    size = 1 / feedback.value if feedback.kind == "capacitor" else feedback.value
    driven = {c.output for c in circuit.cells}
    plus: list[tuple[str, float]] = []
    minus: list[tuple[str, float]] = []
    for ref in cell.inputs:
        branch = circuit.branch(cell, ref)
        conductance = 1 / branch.resistance
        if branch.net not in driven:
            conductance *= drop
        at_plus = cell.node_of(circuit.by_ref[ref]) != cell.summing
        (plus if at_plus else minus).append((branch.net, conductance))
    gains = [(net, -size * g) for net, g in minus]
    if not plus:
        return gains
    sums = {cell.summing: sum(g for _, g in minus), cell.plus: sum(g for _, g in plus)}
    if cell.balance:
        leg = circuit.by_ref[cell.balance]
        sums[cell.node_of(leg)] += 1 / leg.value
    noise_gain = 1 + size * sums[cell.summing]
    return [*gains, *((net, noise_gain * g / sums[cell.plus]) for net, g in plus)]


def _source_drop(circuit: Circuit) -> float:
    """Voltage at the cells' input net over that of the source: 1 / (1 + Rs G)."""
    series = [p for p in circuit.passives if not p.on_board and circuit.input_net in p.nets]
    if not series:
        return 1.0
    (source,) = series
    net = source.nets[0] if source.nets[1] == circuit.input_net else source.nets[1]
    conductance = sum(1 / b.resistance for b in circuit.branches() if b.net == net)
    return 1 / (1 + source.value * conductance)
