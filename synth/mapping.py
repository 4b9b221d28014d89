"""From a scaled block graph with signs to a circuit with ideal values.

Every block becomes one cell; every source that must be read with the other sign gets one
inverter.  Integrators take their capacitor from the scaling; adders their feedback resistor.
A source resistance Rs drops part of the input: with virtual grounds behind them, the input
resistors draw v_src * G, so dividing their ideal values by 1 + Rs G, that is multiplying
them by kappa = 1 - Rs G_ideal, restores every weight exactly.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

from synth.cells import (
    BuiltCell,
    CellInput,
    CellRules,
    Numbering,
    adder_cell,
    balance_of,
    difference_cell,
    integrator_cell,
    inverter_cell,
)
from synth.circuit import GROUND, Circuit, Passive
from synth.errors import RealizationError
from synth.graph import INPUT, Block, BlockGraph
from synth.job import Job
from synth.polarity import Polarity
from synth.quantities import show

__all__ = ["Sizing", "input_factor", "map_graph"]

LOAD_REF = "RLOAD"
SOURCE_REF = "RSOURCE"


@dataclass(frozen=True, kw_only=True)
class Sizing:
    """The impedance of every cell.

    `capacitors` [F] by integrator, `feedback` [ohm] by adder, `inverters` [ohm] for all but
    those in `own_inverters`, which has input and feedback resistance by the source.  Where
    these differ, `factors` has what the resistance of a term, by block and place, is
    multiplied by to make up for it.
    """

    capacitors: Mapping[str, float]
    feedback: Mapping[str, float]
    inverters: float
    own_inverters: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    factors: Mapping[tuple[str, int], float] = field(default_factory=dict)

    def inverter(self, source: str) -> tuple[float, float]:
        """Input and feedback resistance of the inverter of a source [ohm]."""
        return self.own_inverters.get(source, (self.inverters, self.inverters))

    def resistance(self, block: Block, place: int) -> float:
        """Resistance of a block's term [ohm], without a source resistance."""
        weight = abs(float(block.terms[place].weight))
        if block.is_integrator:
            ideal = 1 / (weight * self.capacitors[block.name])
        else:
            ideal = self.feedback[block.name] / weight
        return ideal * self.factors.get((block.name, place), 1.0)


def map_graph(graph: BlockGraph, polarity: Polarity, sizing: Sizing, job: Job) -> Circuit:
    """The circuit of a scaled graph, every value ideal.

    Raises
    ------
    RealizationError
        The source resistance is too large for the input resistors.
    """
    board, signal = job.board, job.signal
    rules = CellRules(resistors=board.resistors, capacitors=board.capacitors, op_amp=board.op_amp)
    wiring = _Wiring(graph, polarity, sizing, input_factor(graph, polarity, sizing, job))
    wiring.source_net = "src" if signal.source_resistance else "in"
    numbering = Numbering()
    built: list[BuiltCell] = []
    if INPUT in polarity.inverters:
        built.append(wiring.inverter(numbering, INPUT, rules))
    for block in graph.blocks:
        built.append(wiring.cell(numbering, block, rules))
        if block.name in polarity.inverters:
            built.append(wiring.inverter(numbering, block.name, rules))
    return Circuit(
        passives=(*_fixtures(job), *(p for b in built for p in b.passives)),
        amplifiers=tuple(b.amplifier for b in built),
        cells=tuple(b.cell for b in built),
    )


def _fixtures(job: Job) -> tuple[Passive, ...]:
    """Source resistance and load."""
    found: list[tuple[str, tuple[str, str], float, str]] = []
    if job.signal.source_resistance:
        found.append((SOURCE_REF, ("in", "src"), job.signal.source_resistance, "the source"))
    if job.signal.load is not None:
        found.append((LOAD_REF, ("out", GROUND), job.signal.load, "the load"))
    return tuple(
        Passive(ref=ref, kind="resistor", nets=nets, value=value, ideal=value, rule=None, sets=text)
        for ref, nets, value, text in found
    )


@dataclass
class _Wiring:
    """Which net carries which signal, and the ideal resistance of every input."""

    graph: BlockGraph
    polarity: Polarity
    sizing: Sizing
    input_factor: float
    source_net: str = "in"

    def direct_net(self, source: str) -> str:
        if source == INPUT:
            return self.source_net
        if source == self.graph.output and not self.polarity.output_from_inverter:
            return "out"
        return source

    def inverted_net(self, source: str) -> str:
        if source == self.graph.output and self.polarity.output_from_inverter:
            return "out"
        return f"{source}_n"

    def resistance(self, net: str, ideal: float) -> float:
        return ideal * self.input_factor if net == self.source_net else ideal

    def inputs(self, block: Block) -> list[CellInput]:
        """Without a source resistance."""
        out: list[CellInput] = []
        for place, term in enumerate(block.terms):
            weight = float(term.weight)
            direct = self.polarity.direct(block.name, term.source, weight)
            net = self.direct_net(term.source) if direct else self.inverted_net(term.source)
            at_plus = self.polarity.at_plus(block.name, term.source, weight)
            out.append(CellInput(net, self.sizing.resistance(block, place), term.sets, at_plus))
        return out

    def behind_source(self, inputs: list[CellInput]) -> list[CellInput]:
        return [replace(i, resistance=self.resistance(i.net, i.resistance)) for i in inputs]

    def cell(self, numbering: Numbering, block: Block, rules: CellRules) -> BuiltCell:
        output = self.direct_net(block.name)
        sign = self.polarity.of(block.name)
        wanted = self.inputs(block)
        inputs = self.behind_source(wanted)
        if block.is_integrator:
            return integrator_cell(
                numbering,
                block=block.name,
                output=output,
                inputs=inputs,
                capacitance=self.sizing.capacitors[block.name],
                rules=rules,
                polarity=sign,
            )
        feedback = self.sizing.feedback[block.name]
        if any(each.at_plus for each in inputs):
            return difference_cell(
                numbering,
                block=block.name,
                output=output,
                inputs=inputs,
                balance=balance_of(wanted, feedback),
                feedback=feedback,
                rules=rules,
                polarity=sign,
            )
        return adder_cell(
            numbering,
            block=block.name,
            output=output,
            inputs=inputs,
            feedback=feedback,
            rules=rules,
            polarity=sign,
        )

    def inverter(self, numbering: Numbering, source: str, rules: CellRules) -> BuiltCell:
        net = self.direct_net(source)
        inward, back = self.sizing.inverter(source)
        return inverter_cell(
            numbering,
            block=source,
            source=CellInput(net, self.resistance(net, inward), f"inverter of {source}"),
            output=self.inverted_net(source),
            feedback=back,
            rules=rules,
            polarity=-self.polarity.of(source),
        )


def input_factor(graph: BlockGraph, polarity: Polarity, sizing: Sizing, job: Job) -> float:
    """kappa, by which the resistors on the source's net are multiplied.

    Raises
    ------
    RealizationError
        The source resistance is too large for them, or would be shared by a cell without a
        virtual ground.
    """
    resistance = job.signal.source_resistance
    if not resistance:
        return 1.0
    _check_shared(graph, polarity)
    conductance = 1 / sizing.inverter(INPUT)[0] if INPUT in polarity.inverters else 0.0
    for block in graph.blocks:
        for place, term in enumerate(block.terms):
            direct = polarity.direct(block.name, term.source, float(term.weight))
            if term.source == INPUT and direct:
                conductance += 1 / sizing.resistance(block, place)
    factor = 1 - resistance * conductance
    if factor <= 0:
        raise RealizationError(
            f"signal.source_resistance: got {show(resistance, 'ohm')}, but the board's input "
            f"resistance would have to be {show(1 / conductance, 'ohm')} in all for its gain; "
            "expected a smaller source resistance, or a buffer before the board"
        )
    return factor


def _check_shared(graph: BlockGraph, polarity: Polarity) -> None:
    """Refuse a cell that uses both inputs of its op-amp beside another behind the source."""
    readers = [b for b, _ in graph.readers(INPUT) if b.name in polarity.both_signs]
    others = len(graph.readers(INPUT)) - 1 + (INPUT in polarity.inverters)
    for block in readers:
        sides = {polarity.at_plus(block.name, t.source, float(t.weight)) for t in block.terms}
        if True in sides and others:
            raise RealizationError(
                f"signal.source_resistance: block {block.name} has no virtual ground and shares "
                "the source with others; expected a buffer before the board, or another form"
            )
