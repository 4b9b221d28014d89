"""Values the job fixes by hand, as what they mean for the scaling of one form.

References follow from the form alone, not from any value: a circuit of unit impedances tells
which part a reference names.  A fixed capacitor or feedback resistor sets the size of its
block, a fixed input resistor the resistance of one term, a resistor of an inverter both
resistors of it; where both are fixed and differ, the resistors around make up for it.  Behind
a source resistance the resistance of a term is that of its part over the factor kappa of
`synth.mapping`, which the scaling decides; so the caller scales, reads kappa, and scales
again.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

from synth.circuit import Cell, Circuit
from synth.errors import JobError
from synth.graph import BlockGraph
from synth.job import Job
from synth.mapping import Sizing, map_graph
from synth.polarity import Polarity

__all__ = ["FixedParts", "fixed_parts", "unit_circuit"]


Place = tuple[str, int]


@dataclass(frozen=True, kw_only=True)
class FixedParts:
    """The fixed values of one form.

    Parameters
    ----------
    sizes
        C [F] or feedback resistance [ohm] by block.
    terms
        Resistance [ohm] by block and place among its terms, before kappa.
    inverters
        Input (before kappa) and feedback resistance [ohm] by the source that is inverted.
    factors
        By block and place: what the resistance of a term is multiplied by for inverters whose
        two resistors differ.
    refs
        Reference by block, or by block and place, for messages.
    values
        Value [ohm], [F] by reference, as the job states it.
    behind_source
        References of resistors behind a source resistance.
    """

    sizes: Mapping[str, float] = field(default_factory=dict)
    terms: Mapping[Place, float] = field(default_factory=dict)
    inverters: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    factors: Mapping[Place, float] = field(default_factory=dict)
    refs: Mapping[str | Place, str] = field(default_factory=dict)
    values: Mapping[str, float] = field(default_factory=dict)
    behind_source: frozenset[str] = frozenset()

    def marked(self, circuit: Circuit) -> Circuit:
        """`circuit` with the fixed parts at their values, and known as fixed."""
        return replace(
            circuit,
            passives=tuple(
                replace(p, value=v, ideal=v, fixed=True) if (v := self.values.get(p.ref)) else p
                for p in circuit.passives
            ),
        )


def unit_circuit(graph: BlockGraph, polarity: Polarity, job: Job) -> Circuit:
    """The circuit of a graph with its references and rules, every impedance arbitrary."""
    sizing = Sizing(
        capacitors={b.name: 1.0 for b in graph.blocks if b.is_integrator},
        feedback={b.name: 1.0 for b in graph.adders},
        inverters=1.0,
    )
    plain = replace(job, signal=replace(job.signal, source_resistance=0.0))
    return map_graph(graph, polarity, sizing, plain)


def fixed_parts(circuit: Circuit, job: Job, *, factor: float = 1.0) -> FixedParts:
    """What the job fixes in a form whose `unit_circuit` is given; `factor` is kappa.

    Raises
    ------
    JobError
        A reference the circuit does not have.
    """
    sizes: dict[str, float] = {}
    terms: dict[Place, float] = {}
    ends: dict[str, dict[str, float]] = {}
    refs: dict[str | Place, str] = {}
    behind: set[str] = set()
    for ref, value in job.board.fixed:
        cell = _cell_of(circuit, ref)
        source_side = ref in cell.inputs and circuit.input_net in circuit.by_ref[ref].nets
        if source_side and job.signal.source_resistance:
            behind.add(ref)
        ideal = value / factor if ref in behind else value
        if cell.kind == "inverter":
            ends.setdefault(cell.block, {})["back" if ref == cell.feedback else "in"] = ideal
        elif ref == cell.balance:
            raise JobError(
                "got a value for what balances the two inputs of an op-amp, which follows from "
                "the other resistors there; expected one of these",
                key=f"board.fixed.{ref}",
            )
        elif ref == cell.feedback:
            sizes[cell.block], refs[cell.block] = ideal, ref
        else:
            place = (cell.block, cell.inputs.index(ref))
            terms[place], refs[place] = ideal, ref
    # One fixed resistor of an inverter sets both.
    inverters = {
        block: (found.get("in", found.get("back", 0.0)), found.get("back", found.get("in", 0.0)))
        for block, found in ends.items()
    }
    return FixedParts(
        sizes=sizes,
        terms=terms,
        inverters=inverters,
        factors=_factors(circuit, inverters),
        refs=refs,
        values=dict(job.board.fixed),
        behind_source=frozenset(behind),
    )


def _factors(circuit: Circuit, inverters: Mapping[str, tuple[float, float]]) -> dict[Place, float]:
    """What the resistances are multiplied by for inverters of a gain other than -1.

    What reads the inverter of a source sees its signal times the gain.  Where the output of the
    board comes from an inverter, the block before it is lower by the gain: resistors into it are
    larger, those that read it directly smaller.
    """
    gains = {source: back / inward for source, (inward, back) in inverters.items()}
    gains = {source: gain for source, gain in gains.items() if gain != 1.0}
    if not gains:
        return {}
    inverted = {c.output: c.block for c in circuit.cells if c.kind == "inverter"}
    direct = {c.output: c.block for c in circuit.cells if c.kind != "inverter"}
    last = inverted.get(circuit.output_net, "")
    factors: dict[Place, float] = {}
    for cell in circuit.cells:
        if cell.kind == "inverter":
            continue
        for place, ref in enumerate(cell.inputs):
            net = circuit.by_ref[ref].nets[0]
            factor = gains.get(inverted.get(net, ""), 1.0)
            before = last in (direct.get(net), inverted.get(net))
            if last and before:
                factor /= gains.get(last, 1.0)
            if last and cell.block == last:
                factor *= gains.get(last, 1.0)
            factors[cell.block, place] = factor
    return factors


def _cell_of(circuit: Circuit, ref: str) -> Cell:
    """The cell of a fixed part, or the error with the references there are."""
    cell = circuit.cell_of(ref)
    if cell is not None:
        return cell
    there = [p.ref for p in circuit.bought if p.ref[0] == ref[0]]
    if len(there) > 1:
        known = f"{there[0]} to {there[-1]}"
    else:
        known = there[0] if there else f"no {ref[0]} at all"
    raise JobError(
        f"got a reference that does not exist in this form, expected {known}",
        key=f"board.fixed.{ref}",
    )
