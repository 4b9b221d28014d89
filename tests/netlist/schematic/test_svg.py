"""What must hold of the SVG text: it is XML, always the same, and shows the geometry."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from collections import Counter

import pytest

from netlist.schematic import draw_schematic
from netlist.schematic.drawing import compose
from netlist.schematic.geometry import dots
from tests.netlist.schematic import boards

SVG = "{http://www.w3.org/2000/svg}"


def test_the_same_circuit_gives_the_same_bytes():
    first = draw_schematic(boards.chain(8), title="Chain")
    assert first == draw_schematic(boards.chain(8), title="Chain")


@pytest.mark.parametrize("title", ["A & B <b>", 'say "x"', "bell \x07 here", "überlang µΩ 中", ""])
def test_any_title_gives_well_formed_text(title):
    root = ET.fromstring(draw_schematic(boards.first_order(), title=title, subtitle=title))
    assert root.tag == f"{SVG}svg"


def test_a_title_of_many_letters_is_broken_within_its_cell():
    long = "Wwwwwwww" * 30
    drawing = compose(boards.first_order(), title=long, supply=(-12, 12), subtitle="")
    pieces = [t for t in drawing.sheet.texts if t.size == 13]
    assert "".join(t.text for t in pieces) == long
    assert max(t.box.right - t.box.left for t in pieces) <= 194


def test_every_wire_and_every_dot_is_drawn_once():
    circuit = boards.third_order()
    drawing = compose(circuit, title="t", supply=(-12, 12), subtitle="")
    root = ET.fromstring(draw_schematic(circuit, title="t"))
    drawn: Counter[tuple[float, ...]] = Counter()
    for path in root.iter(f"{SVG}path"):
        title = path.find(f"{SVG}title")
        if title is not None and (title.text or "").startswith("net "):
            for piece in re.findall(r"M(\S+) (\S+)L(\S+) ([^M]+)", path.get("d", "")):
                drawn[tuple(float(v) for v in piece)] += 1
    assert drawn == Counter((*w.start, *w.end) for w in drawing.sheet.wires)
    circles = {(float(c.get("cx", "")), float(c.get("cy", ""))) for c in root.iter(f"{SVG}circle")}
    assert circles == {at for at, _ in dots(drawing.sheet.wires)}


def test_rails_op_amp_and_decoupling_are_noted():
    text = draw_schematic(boards.third_order(), title="Servo", supply=(-5, 15), subtitle="Sheet 2")
    for note in (
        "+15 V and −5 V at every op-amp",
        "general purpose, 10 MHz, 10 V/us",
        "100 nF per rail at every package (common practice)",
        "E96, 1 %",
        "E12, 5 %",
        "5 op-amps, 12 resistors, 3 capacitors",
        "Servo",
        "Sheet 2",
    ):
        assert note in text


def test_source_and_load_are_dashed_and_nothing_else():
    text = draw_schematic(boards.third_order(), title="t")
    assert text.count("stroke-dasharray") == 2
    assert "not on the board" in text
    bare = draw_schematic(boards.third_order(source=False, load=False), title="t")
    assert "stroke-dasharray" not in bare and "not on the board" not in bare


def test_it_can_stand_in_any_page():
    """No ids that clash, no style sheet that leaks, nothing fetched."""
    text = draw_schematic(boards.chain(8), title="t")
    assert " id=" not in text and "<style" not in text and "href" not in text
