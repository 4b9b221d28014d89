"""Circuits of cells to draw, written out or drawn at random."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from hypothesis import strategies as st

from synth.choosing.pairs import Pair, with_pairs
from synth.circuit import GROUND, Amplifier, Cell, Circuit, Passive
from synth.forms import realize
from synth.job import Board, Job, Signal
from synth.mapping import Sizing, map_graph
from synth.parts import OpAmp, PartRule
from synth.polarity import choose_polarity
from synth.transfer import Factor, TransferFunction
from tests.forms import exists

OP_AMP = OpAmp(
    kind="general purpose",
    gain_bandwidth=10e6,
    slew_rate=10e6,
    open_loop_gain=1e5,
    offset=1e-3,
    bias_current=1e-7,
    voltage_noise=8e-9,
    current_noise=0.5e-12,
    swing_headroom=1.5,
    output_current=0.02,
    supply_current=2e-3,
)
RESISTORS = PartRule(kind="resistor", series="E96", tolerance=0.01, smallest=1e3, largest=1e6)
CAPACITORS = PartRule(kind="capacitor", series="E12", tolerance=0.05, smallest=1e-10, largest=1e-6)
_OHMS = (10200.0, 4990.0, 147000.0, 1e5, 1210.0, 33200.0, 1e6, 768000.0)
_FARADS = (1e-8, 2.2e-9, 4.7e-8, 1e-10)


@dataclass
class Builder:
    """Cells one after the other, references counted through."""

    passives: list[Passive] = field(default_factory=list)
    amplifiers: list[Amplifier] = field(default_factory=list)
    cells: list[Cell] = field(default_factory=list)

    def part(self, letter: str, nets: tuple[str, str]) -> str:
        n = sum(p.ref[0] == letter and p.ref[1:].isdigit() for p in self.passives) + 1
        values, kind, rule = (
            (_OHMS, "resistor", RESISTORS) if letter == "R" else (_FARADS, "capacitor", CAPACITORS)
        )
        value = values[n % len(values)]
        self.passives.append(
            Passive(ref=f"{letter}{n}", kind=kind, nets=nets, value=value, ideal=value, rule=rule)
        )
        return f"{letter}{n}"

    def cell(self, kind: str, output: str, inputs: Sequence[str], polarity: int = 1) -> None:
        """Inputs of a difference with a + before their net go to its other input; ``"0"`` or
        ``"+0"`` is the resistor that balances the two."""
        summing, plus = f"{output}_s", f"{output}_p" if kind == "difference" else GROUND
        joined = {
            self.part("R", (net.removeprefix("+"), plus if net[0] == "+" else summing)): net
            for net in inputs
        }
        refs = tuple(ref for ref, net in joined.items() if net not in ("0", "+0"))
        balance = next((ref for ref, net in joined.items() if net in ("0", "+0")), "")
        feedback = self.part("C" if kind == "integrator" else "R", (summing, output))
        amplifier = f"U{len(self.amplifiers) + 1}"
        self.amplifiers.append(
            Amplifier(ref=amplifier, plus=plus, minus=summing, output=output, figures=OP_AMP)
        )
        self.cells.append(
            Cell(
                kind=kind,
                block=output.removesuffix("_n"),
                amplifier=amplifier,
                inputs=refs,
                feedback=feedback,
                summing=summing,
                output=output,
                polarity=polarity,
                plus=plus,
                balance=balance,
            )
        )

    def fixture(self, ref: str, nets: tuple[str, str], value: float) -> None:
        self.passives.append(
            Passive(ref=ref, kind="resistor", nets=nets, value=value, ideal=value, rule=None)
        )

    def circuit(self) -> Circuit:
        return Circuit(
            passives=tuple(self.passives),
            amplifiers=tuple(self.amplifiers),
            cells=tuple(self.cells),
        )


def from_cells(
    cells: Mapping[str, tuple[str, Sequence[str]]], *, source: bool = False, load: bool = False
) -> Circuit:
    """A circuit from ``{output: (kind, inputs)}``; ``in`` stands for the board's input."""
    builder = Builder()
    entry = "src" if source else "in"
    if source:
        builder.fixture("RSOURCE", ("in", "src"), 50.0)
    if load:
        builder.fixture("RLOAD", ("out", GROUND), 1e4)
    for k, (output, (kind, inputs)) in enumerate(cells.items()):
        nets = [{"in": entry, "+in": f"+{entry}"}.get(net, net) for net in inputs]
        builder.cell(kind, output, nets, polarity=(-1) ** k)
    return builder.circuit()


def first_order() -> Circuit:
    """One leaky integrator."""
    return from_cells({"out": ("integrator", ["in", "out"])})


def paired(circuit: Circuit, **how: str) -> Circuit:
    """The circuit with two resistors in the place of some, in ``"series"`` or ``"parallel"``."""
    pairs = tuple(
        Pair(ref=ref, values=(47e3, 10e3), how=each)
        for ref, each in how.items()
        if ref in {r for cell in circuit.cells for r in cell.inputs}
    )
    assert len(pairs) == len(how)
    return with_pairs(circuit, pairs)


def third_order(*, source: bool = True, load: bool = True) -> Circuit:
    """A chain of three integrators fed at its head, an inverter, an output adder."""
    return from_cells(
        {
            "x3": ("integrator", ["in", "x3", "x2_n", "x1"]),
            "x2": ("integrator", ["x3"]),
            "x2_n": ("inverter", ["x2"]),
            "x1": ("integrator", ["x2"]),
            "out": ("adder", ["x3", "x2_n", "x1"]),
        },
        source=source,
        load=load,
    )


def cascade(sections: int) -> Circuit:
    """Two-integrator loops one after the other, each with its inverter."""
    cells: dict[str, tuple[str, list[str]]] = {}
    entry = "in"
    for k in range(1, sections + 1):
        end = "out" if k == sections else f"y{k}"
        cells[f"a{k}"] = ("integrator", [entry, f"a{k}", f"b{k}_n"])
        cells[f"b{k}"] = ("integrator", [f"a{k}"])
        cells[f"b{k}_n"] = ("inverter", [f"b{k}"])
        cells[end] = ("adder", [entry, f"a{k}", f"b{k}_n"])
        entry = end
    return from_cells(cells, load=True)


def state_variable(sections: int) -> Circuit:
    """Summers that use both inputs of their op-amp, two integrators behind each, and the sum of
    their outputs; what balances the two inputs stands at either, or nowhere."""
    cells: dict[str, tuple[str, list[str]]] = {}
    entry = "+in"
    for k in range(1, sections + 1):
        end = "out" if k == sections else f"y{k}"
        cells[f"h{k}"] = ("difference", [entry, f"+a{k}", f"b{k}", *[["+0"], ["0"], []][k % 3]])
        cells[f"a{k}"] = ("integrator", [f"h{k}"])
        cells[f"b{k}"] = ("integrator", [f"a{k}"])
        cells[end] = ("difference", [f"h{k}", f"+a{k}", f"b{k}", "+0"])
        entry = end if k % 2 else f"+{end}"
    return from_cells(cells, source=True, load=True)


def chain(order: int) -> Circuit:
    """A chain of integrators with an inverter each, all of them read at head and output."""
    cells: dict[str, tuple[str, list[str]]] = {}
    names = [f"x{k}" for k in range(order, 0, -1)]
    read = [f"{n}_n" if k % 2 else n for k, n in enumerate(names)]
    cells["e"] = ("adder", ["in", *read])
    before = "e"
    for k, name in enumerate(names):
        cells[name] = ("integrator", [before])
        if k % 2:
            cells[f"{name}_n"] = ("inverter", [name])
        before = name
    cells["out"] = ("adder", ["e", *read])
    return from_cells(cells, source=True, load=True)


def mapped(form: str, order: int) -> Circuit:
    """What the mapper makes of repeated lags with a zero each but one, values as they come; of
    the lags alone where the form has no zeros."""
    poles = [Factor.real(-1000 * (k + 1)) for k in range(order)]
    zeros = [Factor.real(-700 * (k + 2)) for k in range(order - 1)]
    target = TransferFunction.from_factors(1000, zeros, poles)
    if not exists(form, target):
        target = TransferFunction.from_factors(1e3**order, [], poles)
    graph = realize(target, form)
    sizing = Sizing(
        capacitors={b.name: 1e-8 for b in graph.integrators},
        feedback={b.name: 1e4 for b in graph.adders},
        inverters=1e4,
    )
    job = Job(
        target=target,
        signal=Signal(band_hz=(1, 1e4), load=1e4),
        board=Board(op_amp=OP_AMP, resistors=RESISTORS, capacitors=CAPACITORS),
    )
    circuit = map_graph(graph, choose_polarity(graph), sizing, job)
    return circuit.with_values(
        {p.ref: _OHMS[k % len(_OHMS)] for k, p in enumerate(circuit.bought) if p.ref[0] == "R"}
    )


@st.composite
def circuits(draw: st.DrawFn) -> Circuit:
    """Any wiring of up to 26 cells, each with up to 13 inputs, the output anywhere."""
    n = draw(st.integers(1, 26))
    at = draw(st.integers(0, n - 1))
    long_names = draw(st.booleans())
    nets = [f"section{k}high" if long_names else f"x{k}" for k in range(n)]
    nets[at] = "out"
    # Every net needs a reader: each cell reads the one before it, at least.
    cells = {}
    for k, net in enumerate(nets):
        kind = draw(st.sampled_from(["integrator", "adder", "inverter", "difference"]))
        more = draw(
            st.lists(st.sampled_from(["in", *nets]), max_size=draw(st.sampled_from([3, 12])))
        )
        before = nets[k - 1] if k else "in"
        inputs = [before, *more] if draw(st.booleans()) else [*more, before]
        if kind == "difference":
            signs = draw(st.lists(st.booleans(), min_size=len(inputs), max_size=len(inputs)))
            inputs = [f"+{net}" if plus else net for net, plus in zip(inputs, signs, strict=True)]
            inputs += [f"+{before}", *draw(st.sampled_from([[], ["0"], ["+0"]]))]
        cells[net] = (kind, inputs)
    cells[nets[0]][1].append(nets[-1])
    return from_cells(cells, source=draw(st.booleans()), load=draw(st.booleans()))
