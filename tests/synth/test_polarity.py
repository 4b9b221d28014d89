"""The signs need the fewest inverters there are, and wire every term with its sign."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.forms import FORMS, realize
from synth.graph import Block, BlockGraph, Term
from synth.polarity import choose_polarity, inverter_count
from tests.forms import exists
from tests.strategies import butterworth, random_target


def least_by_trying_all(graph: BlockGraph, inverted: str) -> int:
    """The fewest inverters over all 2^n sign choices."""
    names = [b.name for b in graph.blocks]
    outputs = ["no", "yes"] if inverted == "either" else [inverted]
    return min(
        inverter_count(graph, dict(zip(names, signs, strict=True)), output)
        for signs in itertools.product((1, -1), repeat=len(names))
        for output in outputs
    )


@st.composite
def graphs(draw: st.DrawFn) -> BlockGraph:
    """Any small graph of integrators and adders with signed terms, some adders for both signs."""
    count = draw(st.integers(1, 7))
    kinds = draw(st.lists(st.sampled_from(["integrator", "adder"]), min_size=count, max_size=count))
    blocks = []
    for k, kind in enumerate(kinds):
        # An adder reads only integrators and earlier blocks, so no adders form a loop.
        allowed = ["in"] + [
            f"b{j}" for j in range(count) if kind == "integrator" or j < k or kinds[j] != "adder"
        ]
        if kind == "adder":
            allowed = [a for a in allowed if a != f"b{k}"]
        sources = draw(st.lists(st.sampled_from(allowed), min_size=1, max_size=4, unique=True))
        terms = tuple(Term(s, draw(st.sampled_from([1.0, -1.0]))) for s in sources)
        both = kind == "adder" and draw(st.booleans())
        blocks.append(Block(f"b{k}", kind, terms, both_signs=both))
    return BlockGraph("any", tuple(blocks), f"b{draw(st.integers(0, count - 1))}")


@settings(deadline=None, derandomize=True, max_examples=150)
@given(graphs(), st.sampled_from(["no", "yes", "either"]))
def test_inverters_are_as_few_as_trying_every_sign_finds(graph: BlockGraph, inverted: str) -> None:
    """Brute force over all signs is never better, and the reported inverters are those needed."""
    found = choose_polarity(graph, inverted=inverted)
    assert len(found.inverters) == least_by_trying_all(graph, inverted)
    output = "yes" if found.output_inverted else "no"
    assert inverter_count(graph, found.signs, output) == len(found.inverters)


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("inverted", ["no", "yes", "either"])
def test_forms_get_the_fewest_inverters(form: str, inverted: str) -> None:
    """The real graphs, against brute force."""
    rng = np.random.default_rng(5)
    for order in (1, 2, 3, 4):
        target = random_target(rng, order)
        if not exists(form, target):
            continue
        graph = realize(target, form)
        found = choose_polarity(graph, inverted=inverted)
        assert len(found.inverters) == least_by_trying_all(graph, inverted)


def test_a_two_integrator_loop_needs_exactly_one_inverter() -> None:
    """Negative feedback around two inverting integrators needs an odd number of inversions."""
    graph = realize(butterworth(2, 1e3), "observable")
    assert len(choose_polarity(graph).inverters) == 1


def test_either_takes_the_negative_output_only_when_it_saves_an_inverter() -> None:
    """A single lossy integrator inverts by itself."""
    graph = realize(butterworth(1, 1e3), "observable")
    assert choose_polarity(graph, inverted="no").inverters != ()
    either = choose_polarity(graph, inverted="either")
    assert either.output_inverted
    assert either.inverters == ()


def test_an_adder_for_both_signs_reads_everything_directly() -> None:
    """Of x1 it takes what no choice of signs makes inverting; an adder for one sign needs an
    inverter for that.  Where the signs allow it, nothing goes to the other input."""
    x = Block("x1", "integrator", (Term("in", 1.0), Term("x1", -1.0)))
    terms = (Term("x1", 1.0), Term("in", 1.0))
    plain = BlockGraph("any", (x, Block("y", "adder", terms)), "y")
    both = BlockGraph("any", (x, Block("y", "adder", terms, both_signs=True)), "y")
    assert len(choose_polarity(plain).inverters) == 1
    found = choose_polarity(both)
    assert found.inverters == ()
    assert [found.at_plus("y", t.source, 1.0) for t in terms] == [False, True]
    assert found.direct("y", "in", 1.0) and found.direct("y", "x1", 1.0)
    turned = choose_polarity(
        BlockGraph("any", (x, Block("y", "adder", terms[:1], both_signs=True)), "y")
    )
    assert not turned.at_plus("y", "x1", 1.0)
