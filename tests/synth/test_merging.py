"""Folded adders: H(s) stays, op-amps are as few as trying everything finds, accuracy is kept."""

from __future__ import annotations

import itertools
from collections.abc import Iterable
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from synth import candidates, merging
from synth.candidates import sketch_form
from synth.errors import GraphError
from synth.forms import FORMS, realize
from synth.graph import INPUT, Block, BlockGraph, Term
from synth.merging import LARGEST_GROWTH, exposure, folded, merge_adders
from synth.peaks import frequencies_of_interest
from synth.polarity import choose_polarity, inverter_count
from synth.transfer import Factor, TransferFunction
from tests.forms import realized
from tests.jobs import job_for, resistor_rule
from tests.strategies import butterworth, random_target

F = Fraction
# No ratio of small numbers is an eigenvalue on the axis at these.
FREQUENCY = np.array([0.0137, 0.119, 0.313, 1.71, 23.9])


@st.composite
def graphs(draw: st.DrawFn, *, most: int = 6) -> BlockGraph:
    """Any small graph of integrators and adders, more of these, with rational weights."""
    count = draw(st.integers(2, most))
    kinds = [draw(st.sampled_from(["integrator", "adder", "adder"])) for _ in range(count)]
    weights = st.sampled_from([F(w) for w in (1, -1, 2, -2, "1/2", "-3/2")])
    blocks = []
    for k, kind in enumerate(kinds):
        # An adder reads only integrators and earlier blocks, so no adders form a loop.
        allowed = [INPUT] + [
            f"b{j}" for j in range(count) if kind == "integrator" or j < k or kinds[j] != "adder"
        ]
        sources = draw(st.lists(st.sampled_from(allowed), min_size=1, max_size=3, unique=True))
        blocks.append(
            Block(f"b{k}", kind, tuple(Term(s, draw(weights), f"{s}{k}") for s in sources))
        )
    return BlockGraph("any", tuple(blocks), f"b{draw(st.integers(0, count - 1))}")


def subsets(graph: BlockGraph) -> Iterable[tuple[str, ...]]:
    """Every set of adders that could be folded."""
    names = [b.name for b in graph.adders if b.name != graph.output]
    return itertools.chain.from_iterable(
        itertools.combinations(names, k) for k in range(len(names) + 1)
    )


def substituted(graph: BlockGraph, names: tuple[str, ...]) -> BlockGraph | None:
    """Folding by a second method: each kept block as a sum over kept sources, found by walking
    back along every path through folded adders; None where a block is left without input."""

    def expanded(source: str) -> dict[str, Fraction]:
        if source not in names:
            return {source: F(1)}
        out: dict[str, Fraction] = {}
        for term in graph.by_name[source].terms:
            for s, w in expanded(term.source).items():
                out[s] = out.get(s, F(0)) + F(term.weight) * w
        return out

    blocks = []
    for block in graph.blocks:
        if block.name in names:
            continue
        row: dict[str, Fraction] = {}
        for term in block.terms:
            for s, w in expanded(term.source).items():
                row[s] = row.get(s, F(0)) + F(term.weight) * w
        terms = tuple(Term(s, w) for s, w in row.items() if w)
        if not terms:
            return None
        blocks.append(Block(block.name, block.kind, terms))
    return replace(graph, blocks=tuple(blocks))


def scaled_weights(graph: BlockGraph, block: str, place: int | None, ratio: float) -> BlockGraph:
    """The graph with one weight, or all of a block (its feedback part), times `ratio`."""
    blocks = tuple(
        replace(
            b,
            terms=tuple(
                replace(t, weight=float(t.weight) * (ratio if place in (None, k) else 1.0))
                for k, t in enumerate(b.terms)
            ),
        )
        if b.name == block
        else b
        for b in graph.blocks
    )
    return replace(graph, blocks=blocks)


def exposure_by_differences(graph: BlockGraph, frequency_hz: np.ndarray) -> np.ndarray:
    """Sum over all parts of |dH / d ln part|, each part moved up and down by itself."""
    s, step = 2j * np.pi * frequency_hz, 1e-4
    total = np.zeros(s.size)
    for block in graph.blocks:
        for place in (*range(len(block.terms)), None):
            up, down = (scaled_weights(graph, block.name, place, 1 + d) for d in (step, -step))
            total += np.abs(up.at(s) - down.at(s)) / (2 * step)
    return total


def least_by_trying_all(graph: BlockGraph, inverted: str, growth: float) -> int:
    """The fewest op-amps over all sets of folded adders and all 2^n signs."""
    outputs = ["no", "yes"] if inverted == "either" else [inverted]
    allowed = growth * exposure_by_differences(graph, FREQUENCY) if np.isfinite(growth) else np.inf
    counts = []
    for names in subsets(graph):
        trial = substituted(graph, names)
        if trial is None:
            continue
        costs = np.isfinite(growth) and np.any(exposure_by_differences(trial, FREQUENCY) > allowed)
        if names and costs:
            continue
        kept = [b.name for b in trial.blocks]
        counts += [
            len(kept) + inverter_count(trial, dict(zip(kept, signs, strict=True)), output)
            for signs in itertools.product((1, -1), repeat=len(kept))
            for output in outputs
        ]
    return min(counts)


def op_amps(graph: BlockGraph, inverted: str = "no") -> int:
    return len(graph.blocks) + len(choose_polarity(graph, inverted=inverted).inverters)


def perturbed(graph: BlockGraph, rng: np.random.Generator, by: float = 0.02) -> BlockGraph:
    """Every weight off by up to `by`, each by its own."""
    blocks = tuple(
        replace(
            b,
            terms=tuple(
                replace(t, weight=float(t.weight) * (1 + rng.uniform(-by, by))) for t in b.terms
            ),
        )
        for b in graph.blocks
    )
    return replace(graph, blocks=blocks)


@settings(deadline=None, derandomize=True, max_examples=150)
@given(graphs())
def test_every_fold_gives_the_same_state_equations_in_exact_rationals(graph: BlockGraph) -> None:
    """The integrators stay, so A, B, C, D must be the same numbers; the terms are those of a
    second method."""
    for names in subsets(graph):
        wanted = substituted(graph, names)
        if wanted is None:
            with pytest.raises(GraphError, match="no input"):
                folded(graph, names)
            continue
        found = folded(graph, names)
        assert found.state_matrices() == graph.state_matrices()
        for block in found.blocks:
            theirs = wanted.by_name[block.name].terms
            assert {t.source: t.weight for t in block.terms} == {t.source: t.weight for t in theirs}


@settings(deadline=None, derandomize=True, max_examples=100)
@given(
    graphs(), st.sampled_from(["no", "yes", "either"]), st.sampled_from([LARGEST_GROWTH, np.inf])
)
def test_op_amps_are_as_few_as_trying_every_fold_and_every_sign_finds(
    graph: BlockGraph, inverted: str, growth: float
) -> None:
    """Brute force over all subsets of adders, with and without the limit on accuracy, and over
    all signs is never better; nor is what is found out of its reach."""
    assume(np.all(np.abs(graph.at(2j * np.pi * FREQUENCY)) > 1e-9))
    found = merge_adders(graph, FREQUENCY, inverted=inverted, largest_growth=growth)
    assert op_amps(found, inverted) == least_by_trying_all(graph, inverted, growth)


@settings(deadline=None, derandomize=True, max_examples=60)
@given(graphs())
def test_exposure_is_what_moving_every_part_by_itself_adds_up_to(graph: BlockGraph) -> None:
    """The adjoint against central differences."""
    size = np.abs(graph.at(2j * np.pi * FREQUENCY))
    assume(np.all(size > 1e-9))
    np.testing.assert_allclose(
        exposure(graph, FREQUENCY), exposure_by_differences(graph, FREQUENCY), rtol=1e-5
    )


@settings(deadline=None, derandomize=True, max_examples=150)
@given(graphs())
def test_folding_an_adder_that_is_read_once_never_costs_accuracy(graph: BlockGraph) -> None:
    """Its weights move to one reader, as many as before: the subtraction is where it was."""
    for adder in graph.adders:
        if adder.name == graph.output or len(graph.readers(adder.name)) != 1:
            continue
        try:
            trial = folded(graph, [adder.name])
        except GraphError:
            continue
        before = exposure(graph, FREQUENCY)
        assert np.all(exposure(trial, FREQUENCY) <= before * (1 + 1e-9))


@pytest.mark.parametrize("form", [n for n, form in FORMS.items() if form.structural_zeros])
def test_merging_keeps_zeros_at_the_origin_in_the_structure(form: str) -> None:
    """With every weight off by up to 2 % the high-pass falls by 80 dB a decade as before."""
    target = butterworth(4, 1e3, highpass=True)
    graph = merge_adders(realized(target, form), frequencies_of_interest(target))
    s = 2j * np.pi * np.array([1.0, 10.0])
    off = perturbed(graph, np.random.default_rng(3))
    assert np.max(np.abs(20 * np.log10(np.abs(off.at(s) / target.at(s))))) < 2.0


@pytest.mark.parametrize(("form", "adder"), [("controllable", "e"), ("cascade", "y1")])
def test_the_fold_that_is_refused_would_have_lost_the_zeros(form: str, adder: str) -> None:
    """A high-pass signal read several times: each reader would subtract for itself."""
    w = 6e3
    poles = [Factor.pair(w, 0.6), Factor.pair(w, 1.3)]
    zeros = [Factor.real(0), Factor.real(0), Factor.real(0), Factor.real(-F(3e3))]
    target = TransferFunction.from_factors(1, zeros, poles)
    graph = realize(target, form)
    s = 2j * np.pi * np.array([1.0, 10.0])

    def off(graph: BlockGraph) -> float:
        np.testing.assert_allclose(graph.at(s), target.at(s), rtol=1e-6)
        response = perturbed(graph, np.random.default_rng(3)).at(s)
        return float(np.max(np.abs(20 * np.log10(np.abs(response / target.at(s))))))

    assert off(folded(graph, [adder])) > 10.0
    assert off(graph) < 2.0
    assert off(merge_adders(graph, frequencies_of_interest(target))) < 2.0


def test_a_high_pass_read_once_is_folded_and_keeps_its_accuracy() -> None:
    """u - x into an integrator alone: the reader subtracts as the adder did, with no more
    parts, so the error of perturbed weights is not larger, however much the two cancel."""
    w = F(1000)
    graph = BlockGraph(
        "any",
        (
            Block("x1", "integrator", (Term(INPUT, w, "in"), Term("x1", -w, "back"))),
            Block("h", "adder", (Term(INPUT, F(1), "u"), Term("x1", F(-1), "x"))),
            Block("x2", "integrator", (Term("h", -w, "h"), Term("x2", -w, "back"))),
        ),
        "x2",
    )
    frequency = np.geomspace(0.01, 1e5, 40)
    merged = merge_adders(graph, frequency)
    assert [b.name for b in merged.blocks] == ["x1", "x2"]
    assert [t.sets for t in merged.by_name["x2"].terms] == [
        "h (in part of h)",
        "h (x1 part of h)",
        "back",
    ]
    s = 2j * np.pi * frequency
    rng = np.random.default_rng(2)
    errors = [
        np.mean([np.abs(perturbed(g, rng).at(s) / graph.at(s) - 1) for _ in range(400)], axis=0)
        for g in (merged, graph)
    ]
    assert np.all(errors[0] < 1.1 * errors[1])


def lag_cascade() -> TransferFunction:
    """Two lags, each with its zero above its pole, and a pole: nothing cancels much."""
    zeros = [Factor.real(-4e3), Factor.real(-9e4)]
    poles = [Factor.real(-1e3), Factor.real(-3e4), Factor.real(-5e5)]
    return TransferFunction.from_factors(400_000, zeros, poles)


def test_lags_of_a_cascade_lose_their_adders_and_no_accuracy(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """Op-amps are saved, H(s) is exactly the same, and the spread from tolerance of the whole
    circuit, by the nodal engine, is not larger."""
    target = lag_cascade()
    graph = realize(target, "cascade")
    merged = merge_adders(graph, frequencies_of_interest(target))
    assert len(merged.adders) < len(graph.adders)
    assert merged.state_matrices() == graph.state_matrices()
    frequency = np.geomspace(10, 1e5, 60)
    job = job_for(target, (10, 1e5), input_peak=0.5)
    sketch = sketch_form(job, "cascade", frequency)
    assert [b.name for b in sketch.graph.blocks] == [b.name for b in merged.blocks]
    monkeypatch.setattr(candidates, "merge_adders", lambda graph, *_, **__: graph)
    plain = sketch_form(job, "cascade", frequency)
    assert [b.name for b in plain.graph.blocks] == [b.name for b in graph.blocks]
    assert len(sketch.circuit.amplifiers) <= len(plain.circuit.amplifiers) - 2
    assert sketch.spread_db <= plain.spread_db
    assert sketch.spread_deg <= 1.1 * plain.spread_deg


def test_references_do_not_depend_on_what_the_job_fixes() -> None:
    """Fixing a part of the merged circuit finds that very part."""
    frequency = np.geomspace(10, 1e5, 60)
    job = job_for(lag_cascade(), (10, 1e5), input_peak=0.5)
    plain = sketch_form(job, "cascade", frequency).circuit
    ref = plain.cells[-1].feedback
    value = plain.by_ref[ref].value
    fixed = replace(job, board=replace(job.board, fixed=((ref, value),)))
    again = sketch_form(fixed, "cascade", frequency).circuit
    assert again.by_ref[ref].value == value
    assert [(p.ref, p.nets) for p in again.passives] == [(p.ref, p.nets) for p in plain.passives]


def test_many_adders_are_folded_one_by_one(monkeypatch: pytest.MonkeyPatch) -> None:
    """Never worse than no fold, never better than all subsets, and equal to the target; most of
    the time as good as these."""
    rng = np.random.default_rng(8)
    as_good = 0
    for _ in range(20):
        target = random_target(rng, 6, decades=2.0)
        graph, grid = realize(target, "cascade"), frequencies_of_interest(target)[::4]
        best = op_amps(merge_adders(graph, grid))
        with monkeypatch.context() as patch:
            patch.setattr(merging, "MOST_ENUMERATED", 0)
            found = merge_adders(graph, grid)
        assert best <= op_amps(found) <= op_amps(graph)
        assert found.state_matrices() == graph.state_matrices()
        as_good += op_amps(found) == best
    assert as_good >= 15


def test_the_output_and_integrators_are_not_folded() -> None:
    graph = realize(lag_cascade(), "cascade")
    for name in ("x1", graph.output, "nothing"):
        with pytest.raises(GraphError, match="expected an adder that is not the output"):
            folded(graph, [name])


def test_weights_that_cancel_but_for_rounding_are_no_part() -> None:
    """0.1 + 0.2 - 0.3 in doubles is 6e-17, which no resistor could carry."""
    graph = BlockGraph(
        "any",
        (
            Block("a", "adder", (Term(INPUT, 0.1), Term("x1", 1.0))),
            Block("b", "adder", (Term(INPUT, 0.2), Term("a", 1.0))),
            Block("x1", "integrator", (Term("b", 1.0), Term(INPUT, -0.3), Term("x1", -5.0))),
        ),
        "x1",
    )
    with pytest.raises(GraphError, match="cancel but for rounding"):
        folded(graph, ["a", "b"])
    assert merge_adders(graph, FREQUENCY).by_name.keys() != {"x1"}


def test_what_does_not_scale_folded_is_taken_as_it_is() -> None:
    """Resistors of 10 to 20 kohm: the level of the adder is the freedom that makes them fit."""
    zeros = [Factor.real(-18149.7), Factor.real(-5909.6), Factor.real(-41694.1)]
    poles = [Factor.real(-18054.1), Factor.real(-54257.3), Factor.real(-21124.3)]
    target = TransferFunction.from_factors(2, zeros, poles)
    narrow = replace(resistor_rule(), smallest=1e4, largest=2e4)
    frequency = np.geomspace(10, 1e4, 30)
    graph = realize(target, "cascade")
    wide, tight = (
        sketch_form(job_for(target, (10, 1e4), resistors=rule), "cascade", frequency)
        for rule in (resistor_rule(), narrow)
    )
    assert len(wide.graph.blocks) < len(graph.blocks)
    assert [b.name for b in tight.graph.blocks] == [b.name for b in graph.blocks]
    assert tight.notices == ()
