"""What must hold of every schematic: it says what the circuit is, and it can be read."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import HealthCheck, given, settings

from netlist.schematic.drawing import Drawing, compose
from netlist.schematic.geometry import Wire
from netlist.schematic.lettering import value_text
from netlist.schematic.svg import print_scale
from synth.circuit import Circuit
from synth.forms import FORMS
from tests.netlist.schematic import boards
from tests.netlist.schematic.drawn import Groups, collisions, overlapping_wires, read_nets

BOARDS = {
    "first order": boards.first_order(),
    "third order": boards.third_order(),
    "third order, bare": boards.third_order(source=False, load=False),
    "cascade of order 6": boards.cascade(3),
    "cascade of order 8": boards.cascade(4),
    "chain of order 8": boards.chain(8),
    "chain of order 12": boards.chain(12),
    "cascade of order 12": boards.cascade(6),
    "two in parallel": boards.paired(boards.third_order(), R1="parallel", R9="parallel"),
    "two in series": boards.paired(boards.third_order(), R2="series", R5="series"),
    "all pairs": boards.paired(
        boards.cascade(3), R1="series", R2="parallel", R4="parallel", R5="series"
    ),
    "state variable": boards.state_variable(1),
    "state variable, three sections": boards.state_variable(3),
    "state variable, pairs": boards.paired(
        boards.state_variable(2), R1="series", R2="parallel", R3="series"
    ),
    "first order, all pairs": boards.paired(boards.first_order(), R1="series", R2="parallel"),
}


def drawing_of(circuit: Circuit) -> Drawing:
    return compose(circuit, title="A board & its <title>", supply=(-12, 12), subtitle="first issue")


def true_nets(circuit: Circuit) -> dict[frozenset[tuple[str, str]], str]:
    """Pins by net from the circuit itself; the pins of a passive part carry no names."""
    nets: dict[str, set[tuple[str, str]]] = {}
    for part in circuit.passives:
        for net in part.nets:
            nets.setdefault(net, set()).add((part.ref, net))
    for a in circuit.amplifiers:
        for pin, net in (("+", a.plus), ("-", a.minus), ("out", a.output)):
            nets.setdefault(net, set()).add((a.ref, pin))
    return {frozenset(pins): net for net, pins in nets.items()}


def check_connections(circuit: Circuit, drawing: Drawing) -> None:
    """The drawn nets are the circuit's nets, pin for pin, and bear their names."""
    names = {f.name for f in drawing.sheet.flags}
    drawn = read_nets(drawing.sheet, names)
    passive = {p.ref for p in circuit.passives}
    got = sorted(
        (sorted((ref, "" if ref in passive else pin) for ref, pin in pins), sorted(names))
        for pins, names in drawn.items()
    )
    flagged = {circuit.input_net: {circuit.input_net}} | {n: {n} for n in names}
    want = sorted(
        (
            sorted((ref, "" if ref in passive else pin) for ref, pin in pins),
            sorted(flagged.get(net, set()) & names),
        )
        for pins, net in true_nets(circuit).items()
    )
    assert got == want


@pytest.mark.parametrize("circuit", BOARDS.values(), ids=BOARDS)
def test_the_drawn_connections_are_those_of_the_circuit(circuit):
    check_connections(circuit, drawing_of(circuit))


@pytest.mark.parametrize("circuit", BOARDS.values(), ids=BOARDS)
def test_nothing_lies_on_anything_else(circuit):
    sheet = drawing_of(circuit).sheet
    assert collisions(sheet) == []
    assert overlapping_wires(sheet) == []


@settings(
    deadline=None,
    derandomize=True,
    max_examples=25,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large],
)
@given(boards.circuits())
def test_any_wiring_of_cells_is_drawn_as_it_is(circuit):
    drawing = drawing_of(circuit)
    check_connections(circuit, drawing)
    assert collisions(drawing.sheet) == []
    assert overlapping_wires(drawing.sheet) == []


MAPPED = [(form, order) for form in FORMS for order in (1, 4, 8)]


@pytest.mark.parametrize(("form", "order"), MAPPED)
def test_mapped_circuits_are_drawn_as_they_are(form, order):
    circuit = boards.mapped(form, order)
    drawing = drawing_of(circuit)
    check_connections(circuit, drawing)
    assert collisions(drawing.sheet) == []
    assert overlapping_wires(drawing.sheet) == []


def test_reading_notices_a_missing_wire():
    """Otherwise the comparison of nets could not fail: no wire may be idle."""
    circuit = boards.third_order()
    drawing = drawing_of(circuit)
    for k in range(len(drawing.sheet.wires)):
        wires = [w for i, w in enumerate(drawing.sheet.wires) if i != k]
        with pytest.raises(AssertionError):
            check_connections(circuit, replace(drawing, sheet=replace(drawing.sheet, wires=wires)))


def test_reading_notices_a_short():
    """A piece of wire between two nets that ends on both."""
    circuit = boards.third_order()
    drawing = drawing_of(circuit)
    resistors = {s.ref: dict(s.pins) for s in drawing.sheet.symbols if s.kind == "resistor"}
    x, y = resistors["R3"]["2"]
    bridge = [Wire((x + 1, y), (x + 1, y - 30), "x9")]
    moved = [*drawing.sheet.wires, *bridge]
    with pytest.raises(AssertionError):
        check_connections(circuit, replace(drawing, sheet=replace(drawing.sheet, wires=moved)))


def test_collisions_and_overlaps_are_noticed():
    drawing = drawing_of(boards.third_order())
    sheet = drawing.sheet
    text = sheet.texts[0]
    crowded = replace(sheet, texts=[*sheet.texts, replace(text, at=(text.at[0] + 4, text.at[1]))])
    assert collisions(crowded)
    wire = max(sheet.wires, key=lambda w: abs(w.start[0] - w.end[0]))
    assert overlapping_wires(replace(sheet, wires=[*sheet.wires, replace(wire, net="other")]))
    part = next(s for s in sheet.symbols if s.kind == "capacitor")
    (x, y) = part.at
    assert collisions(replace(sheet, wires=[*sheet.wires, Wire((x, y - 40), (x, y + 40), "n")]))


@pytest.mark.parametrize("circuit", BOARDS.values(), ids=BOARDS)
def test_every_part_stands_there_with_reference_and_value(circuit):
    texts = [t.text for t in drawing_of(circuit).sheet.texts]
    for part in circuit.bought:
        assert texts.count(f"{part.ref} {value_text(part)}") == 1
    for part in circuit.passives:
        assert sum(t.split()[0] == part.ref for t in texts) == 1
    for amplifier in circuit.amplifiers:
        assert texts.count(amplifier.ref) >= 1


@pytest.mark.parametrize("circuit", BOARDS.values(), ids=BOARDS)
def test_every_op_amp_output_bears_its_net(circuit):
    """As a text over the wire or on a flag that the wire runs into."""
    sheet = drawing_of(circuit).sheet
    shown = {t.text for t in sheet.texts if t.tone == "accent"}
    shown |= {f.name for f in sheet.flags if f.leaving}
    assert shown >= {a.output for a in circuit.amplifiers}


@pytest.mark.parametrize("circuit", BOARDS.values(), ids=BOARDS)
def test_everything_lies_within_the_frame_and_prints_legibly(circuit):
    drawing = drawing_of(circuit)
    e = drawing.sheet.extent
    assert e.left >= 20 and e.top >= 20
    assert e.right <= drawing.width - 20 and e.bottom <= drawing.height - 20
    assert 0.8 < drawing.width / drawing.height < 3.2
    # Letters of 10 px: 2 mm on A3 is about 6 points.
    assert 10 * print_scale(drawing.width, drawing.height) >= 2.0


def test_an_order_of_eight_prints_in_seven_points():
    for name in ("cascade of order 8", "chain of order 8"):
        drawing = drawing_of(BOARDS[name])
        assert 10 * print_scale(drawing.width, drawing.height) >= 7 * 25.4 / 72


@pytest.mark.parametrize("circuit", BOARDS.values(), ids=BOARDS)
def test_rows_read_from_left_to_right(circuit):
    """Cells follow the circuit's order; inputs stand left of their op-amp, outputs right."""
    drawing = drawing_of(circuit)
    places = {s.ref: s.at for s in drawing.sheet.symbols}
    order = [places[c.amplifier] for c in circuit.cells]
    assert order == sorted(order, key=lambda p: (p[1], p[0]))
    for cell in circuit.cells:
        x = places[cell.amplifier][0]
        assert all(places[ref][0] < x for ref in cell.inputs)
        behind = dict(cell.series)
        assert len({places[ref][0] for ref in cell.inputs if ref not in behind}) <= 1
        assert all(places[behind[ref]][0] < places[ref][0] for ref in behind)
        assert places[cell.feedback][1] < places[cell.amplifier][1]


@pytest.mark.parametrize(
    "circuit", [boards.third_order(), boards.cascade(4), boards.chain(8)], ids=["3", "8", "chain"]
)
def test_the_heavy_line_runs_from_input_to_output(circuit):
    """Along heavy wires and through resistors and op-amps, without a jump."""
    sheet = drawing_of(circuit).sheet
    groups = Groups()
    for wire in sheet.wires:
        if wire.heavy:
            groups.join(wire.start, wire.end)
    for symbol in sheet.symbols:
        pins = dict(symbol.pins)
        if symbol.kind == "op_amp":
            groups.join(pins["-"], pins["out"])
        elif symbol.kind == "resistor" and len(pins) == 2:
            groups.join(pins["1"], pins["2"])
    ports = {f.name: f.at for f in sheet.flags if f.port}
    # Feedback resistors and inputs off the path hang on thin wires, so they join nothing.
    assert groups.root(ports["in"]) == groups.root(ports["out"])


def test_neighbours_in_a_chain_are_joined_straight():
    drawing = drawing_of(boards.third_order())
    layout = drawing.layout
    straight = [
        k.reader.ref for each in layout.links.values() for k in each.links if k.how == "straight"
    ]
    assert "R1" in straight and "R5" in straight


def test_a_small_board_goes_without_flags():
    for name in ("first order", "third order"):
        assert not [f for f in drawing_of(BOARDS[name]).sheet.flags if not f.port]


def test_long_connections_have_a_flag_at_both_ends():
    sheet = drawing_of(boards.chain(8)).sheet
    leaving = {f.name for f in sheet.flags if f.leaving or f.port}
    arriving = {f.name for f in sheet.flags if not f.leaving and not f.port}
    assert arriving and arriving <= leaving
