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
from tests.strategies import butterworth, exists, random_target


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
    """Any small graph of integrators and adders with signed terms."""
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
        blocks.append(Block(f"b{k}", kind, terms))
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
        graph = realize(target if exists(form, target) else butterworth(order, 1e3), form)
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
