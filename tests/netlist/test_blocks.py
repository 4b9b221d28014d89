"""A block diagram shows its graph, the whole graph and nothing else, and nothing overlaps."""

from __future__ import annotations

import math
import os
import subprocess
import sys
from functools import cache
from itertools import combinations

import numpy as np
import pytest

from netlist.blocks import WIDEST_ROW, draw_blocks
from netlist.blocks.buses import Link, buses
from netlist.blocks.numbers import gain_text
from netlist.blocks.order import ordered, sections
from netlist.blocks.shapes import DOT_RADIUS, SUM_RADIUS
from synth.forms import FORMS, realize
from synth.graph import Block, BlockGraph, Term
from synth.transfer import Factor, TransferFunction
from tests.forms import realized
from tests.netlist.block_reader import (
    bounds,
    inside,
    number,
    on,
    overlap,
    read_drawing,
    read_graph,
)

ORDERS = (1, 2, 3, 5, 6, 8, 12)


def target(kind: str, order: int) -> TransferFunction:
    """Low-pass, high-pass (zeros at the origin) and one with as many zeros as poles."""
    w = 2 * math.pi * 1000
    poles = [Factor.pair(w * (1 + 0.3 * k), 0.7 + k) for k in range(order // 2)]
    poles += [Factor.real(-w)] * (order % 2)
    if kind == "low-pass":
        return TransferFunction.from_factors(w**order, [], poles)
    if kind == "high-pass":
        return TransferFunction.from_factors(-1, [Factor.real(0)] * order, poles)
    zeros = [Factor.pair(w * (1.1 + 0.3 * k), 3) for k in range(order // 2)]
    zeros += [Factor.real(-900.0)] * (order % 2)
    return TransferFunction.from_factors(2, zeros, poles)


def scaled(graph: BlockGraph) -> BlockGraph:
    """Every signal as large as the output, so that weights have usual sizes."""
    signals = graph.signals(2j * np.pi * np.logspace(1, 5, 300))
    peaks = {name: float(np.max(np.abs(v))) for name, v in signals.items()}
    return graph.rescaled({n: peaks[graph.output] / p for n, p in peaks.items() if p})


def random_graph(integrators: int, adders: int, density: float, seed: int) -> BlockGraph:
    """Any graph: loops, loose ends, weights of one, of either sign and of odd sizes."""
    rng = np.random.default_rng(seed)
    states = [f"x{k + 1}" for k in range(integrators)]
    blocks, known = [], ["in", *states]

    def terms(sources, otherwise):
        chosen = [s for s in sources if rng.random() < density] or [otherwise]
        weights = [float(rng.choice([1, -1, 10 ** rng.uniform(-4, 8)])) for _ in chosen]
        signs = [float(rng.choice([1, -1])) for _ in chosen]
        return tuple(Term(s, w * g) for s, w, g in zip(chosen, weights, signs, strict=True))

    for k, name in enumerate(states):
        blocks.append(Block(name, "integrator", terms(known, known[k])))
    for k in range(adders):
        blocks.append(Block(f"v{k + 1}", "adder", terms(known, states[0])))
        known.append(f"v{k + 1}")
    return BlockGraph("random", tuple(blocks), known[-1])


GRAPHS = {
    f"{form}, {kind}, order {order}": (form, kind, order)
    for form in FORMS
    for kind in ("low-pass", "high-pass", "biproper")
    for order in ORDERS
}
RANDOM = {
    f"random, {n} integrators, {m} adders, density {density}": (n, m, density, n + 10 * m)
    for n, m, density in ((1, 0, 1), (2, 1, 0.5), (3, 3, 0.4), (4, 0, 1), (6, 2, 0.3), (9, 4, 0.2))
}


@cache
def of_form(form: str, kind: str, order: int) -> BlockGraph:
    return scaled(realized(target(kind, order), form))


@pytest.fixture(params=[*GRAPHS, *RANDOM])
def graph(request) -> BlockGraph:
    if request.param in GRAPHS:
        form, kind, order = GRAPHS[request.param]
        return of_form(form, kind, order)
    return random_graph(*RANDOM[request.param])


def assert_shows(svg: str, graph: BlockGraph) -> None:
    shown, output = read_graph(read_drawing(svg))
    assert output == graph.output
    assert shown.keys() == graph.by_name.keys()
    for block in graph.blocks:
        kind, terms = shown[block.name]
        assert kind == block.kind
        assert terms.keys() == {t.source for t in block.terms}
        for term in block.terms:
            assert terms[term.source] == pytest.approx(float(term.weight), rel=5.1e-4, abs=0)


def test_the_drawing_read_back_gives_the_graph(graph):
    """Blocks, sources, signs and weights (to the four digits shown), from geometry alone."""
    assert_shows(draw_blocks(graph), graph)


def test_a_wire_left_out_is_noticed():
    """The reading that the test above rests on does not pass by itself."""
    graph = scaled(realize(target("biproper", 3), "controllable"))
    lines = draw_blocks(graph).splitlines()
    wires = [k for k, line in enumerate(lines) if line.startswith("<polyline")]
    for k in wires:
        with pytest.raises((AssertionError, KeyError, StopIteration)):
            assert_shows("\n".join(lines[:k] + lines[k + 1 :]), graph)


def test_nothing_overlaps(graph):
    drawing = read_drawing(
        draw_blocks(graph, title="A title", input_label="in", output_label="out")
    )
    gains = [bounds(g) for g in drawing.gains]
    sums = [_around(c, SUM_RADIUS) for c in drawing.circles["sum"]]
    dots = [_around(c, DOT_RADIUS) for c in drawing.circles["dot"]]
    heads = [
        bounds((tip, (base[0] - 3.5, base[1]), (base[0] + 3.5, base[1])))
        for tip, base in drawing.arrows
    ]
    parts = [*gains, *drawing.integrators, *sums, *dots]
    texts = [box for _, _, box in drawing.texts]
    for a, b in combinations(parts, 2):
        assert not overlap(a, b)
    for a, b in combinations(texts, 2):
        assert not overlap(a, b)
    for text in texts:
        assert inside(text, (0, 0, *drawing.size))
        for part in parts:
            assert not overlap(text, part) or inside(text, part)
        for head in heads:
            assert not overlap(text, head)


def test_no_wire_runs_through_a_part_or_a_text(graph):
    drawing = read_drawing(draw_blocks(graph, title="A title"))
    solid = [bounds(g) for g in drawing.gains] + drawing.integrators
    solid += [_around(c, SUM_RADIUS) for c in drawing.circles["sum"]]
    solid += [box for _, _, box in drawing.texts]
    for segment in drawing.segments:
        box = bounds(segment)
        thick = (box[0] - 0.1, box[1] - 0.1, box[2] + 0.1, box[3] + 0.1)
        for part in solid:
            assert not overlap(thick, part, slack=0.15)


def test_wires_meet_only_at_ends_and_dots(graph):
    """No end in the middle of another wire without a dot, no two wires on top of each other, and
    every dot where at least three pieces meet."""
    drawing = read_drawing(draw_blocks(graph))
    dots = drawing.circles["dot"]
    for a, b in combinations(drawing.segments, 2):
        for p, q in ((a, b), (b, a)):
            for end in p:
                if on(end, q) and not any(_near(end, corner) for corner in q):
                    assert any(_near(end, dot) for dot in dots)
        assert _shared_length(a, b) < 0.1
    for dot in dots:
        touching = [s for s in drawing.segments if on(dot, s)]
        branches = sum(1 if any(_near(dot, p) for p in s) else 2 for s in touching)
        assert branches >= 3


def test_the_controllable_form_is_drawn_in_its_classical_shape():
    """Integrators on one line, x3 at the left; numerator gains above, feedback gains below."""
    w = 6283.2
    head = [Term("in", w)] + [Term(f"x{k}", -a * w) for k, a in ((3, 2.1), (2, 2.2), (1, 0.9))]
    blocks = (
        Block("x3", "integrator", tuple(head)),
        Block("x2", "integrator", (Term("x3", w),)),
        Block("x1", "integrator", (Term("x2", w),)),
        Block("y", "adder", tuple(Term(f"x{k}", 0.3 * k) for k in (3, 2, 1))),
    )
    drawing = read_drawing(draw_blocks(BlockGraph("controllable", blocks, "y")))
    (line,) = {(y0 + y1) / 2 for _, y0, _, y1 in drawing.integrators}
    names = sorted((box[0], text) for text, kind, box in drawing.texts if kind == "name")
    assert [text for _, text in names] == ["u", "x3", "x2", "x1", "y", "y"]
    heights = [((y0 + y1) / 2, round(x0)) for x0, y0, _, y1 in map(bounds, drawing.gains)]
    above = sorted(x for y, x in heights if y < line - 20)
    below = sorted(x for y, x in heights if y > line + 20)
    assert len(above) == 2 and len(below) == 3
    assert above == below[:2], "the gains of one state stand above each other"


@pytest.mark.parametrize("form", ["controllable", "observable"])
@pytest.mark.parametrize("order", ORDERS)
def test_companion_forms_need_one_line_above_and_one_below(form, order):
    graph = realize(target("biproper", order), form)
    order_of = {name: k for k, name in enumerate(ordered(graph))} | {"in": -1}
    links = [Link(order_of[t.source], order_of[b.name], 1.0) for b in graph.blocks for t in b.terms]
    beside = [k for k in links if not k.straight]
    assert len(buses([k for k in beside if k.above], above=True)) == 1
    assert len(buses([k for k in beside if not k.above], above=False)) == 1


@pytest.mark.parametrize("order", [6, 8, 12])
def test_a_cascade_is_cut_between_its_sections_and_its_rows_stay_narrow(order):
    graph = scaled(realize(target("biproper", order), "cascade"))
    assert len(sections(graph, ordered(graph))) == order // 2
    drawing = read_drawing(draw_blocks(graph))
    assert drawing.size[0] < WIDEST_ROW + 120


@pytest.mark.parametrize("seed", range(30))
def test_the_fewest_lines_carry_all_connections(seed):
    """Against trying every set of sources and readers, the smallest first."""
    rng = np.random.default_rng(seed)
    links = [
        Link(s, d, 1.0) for s in range(4) for d in range(4) if rng.random() < 0.1 + 0.02 * seed
    ]
    made = buses(links, above=False)
    assert sorted((k.source, k.target) for bus in made for k in bus.links) == sorted(
        (k.source, k.target) for k in links
    )
    hubs = [(side, place) for side in (True, False) for place in range(4)]
    fewest = next(
        size
        for size in range(9)
        for chosen in combinations(hubs, size)
        if all((True, k.source) in chosen or (False, k.target) in chosen for k in links)
    )
    assert len(made) == fewest


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (6283.185, "6.283k"),
        (-0.0123456, "−12.35m"),
        (999.96, "1k"),
        (1000.0, "1k"),
        (1e-6, "1µ"),
        (3e22, "3e22"),
        (-1.24e-19, "−1.2e−19"),
    ],
)
def test_gains_are_written_with_four_digits_and_a_prefix(value, text):
    assert gain_text(value) == text
    assert number(text) == pytest.approx(value, rel=5e-2 if "e" in text else 5.1e-4)


def test_labels_are_escaped():
    graph = realize(target("low-pass", 1), "controllable")
    svg = draw_blocks(graph, title="a < b & c\x00", input_label="<u>", output_label='"y"')
    assert "a &lt; b &amp; c" in svg
    read_drawing(svg)


def test_equal_graphs_give_equal_bytes_in_any_process():
    code = (
        "import sys; from tests.netlist.test_blocks import *;"
        "sys.stdout.write(draw_blocks(scaled(realize(target('biproper', 6), 'cascade'))))"
    )
    here = draw_blocks(scaled(realize(target("biproper", 6), "cascade")))
    for seed in ("1", "2"):
        environment = {**os.environ, "PYTHONHASHSEED": seed, "PYTHONIOENCODING": "utf-8"}
        there = subprocess.run(
            [sys.executable, "-c", code], capture_output=True, check=True, env=environment
        )
        assert there.stdout.decode() == here


def _around(centre, radius):
    x, y = centre
    return (x - radius, y - radius, x + radius, y + radius)


def _near(p, q):
    return abs(p[0] - q[0]) < 0.05 and abs(p[1] - q[1]) < 0.05


def _shared_length(a, b):
    """Length on which two pieces lie on top of each other."""
    a, b = bounds(a), bounds(b)
    width = min(a[2], b[2]) - max(a[0], b[0])
    height = min(a[3], b[3]) - max(a[1], b[1])
    if width < -0.01 or height < -0.01:
        return 0.0
    return max(width, height) if min(width, height) < 0.01 else 0.0
