"""From a circuit's values back to a block graph: what the parts really ask for.

Every cell becomes a block with the weights its parts set, ideal op-amps assumed: an
integrator -1/(R C) for each input, an adder or inverter -R_f/R.  The voltages are those of
the op-amp outputs, signs included, so this is also the check that mapping and values are
what the mathematics meant.
"""

from __future__ import annotations

from synth.circuit import Circuit
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
        feedback = circuit.by_ref[cell.feedback]
        is_integrator = feedback.kind == "capacitor"
        weights: dict[str, float] = {}
        for ref in cell.inputs:
            branch = circuit.branch(cell, ref)
            net = branch.net
            weight = -1 / (branch.resistance * feedback.value)
            if not is_integrator:
                weight = -feedback.value / branch.resistance
            if net in names:
                source = names[net]
            else:
                source, weight = INPUT, weight * drop
            weights[source] = weights.get(source, 0.0) + weight
        terms = tuple(Term(source, weight) for source, weight in weights.items())
        kind = "integrator" if is_integrator else "adder"
        blocks.append(Block(names[cell.output], kind, terms))
    return BlockGraph("readback", tuple(blocks), names[circuit.output_net])


def _source_drop(circuit: Circuit) -> float:
    """Voltage at the cells' input net over that of the source: 1 / (1 + Rs G)."""
    series = [p for p in circuit.passives if not p.on_board and circuit.input_net in p.nets]
    if not series:
        return 1.0
    (source,) = series
    net = source.nets[0] if source.nets[1] == circuit.input_net else source.nets[1]
    conductance = sum(1 / b.resistance for b in circuit.branches() if b.net == net)
    return 1 / (1 + source.value * conductance)
