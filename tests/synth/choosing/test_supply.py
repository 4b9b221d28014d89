"""No choice takes more parts than there are, and it is the best of those that do not."""

from __future__ import annotations

import itertools
from collections import Counter
from dataclasses import replace

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.choosing import choose_values
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Goal, LinearModel
from synth.choosing.supply import Supply, allotted, check_supply
from synth.circuit import Circuit
from synth.errors import RealizationError
from synth.nodal import compile_circuit
from synth.parts import PartRule, StockItem
from synth.transfer import Factor, TransferFunction
from tests.jobs import capacitor_rule, job_for, resistor_rule
from tests.strategies import butterworth

BAND = (100.0, 2e3)
FREQUENCY = np.geomspace(*BAND, 61)


def stocked(rule: PartRule, counts: dict[float, int | None], tolerance: float = 0.01) -> PartRule:
    items = (StockItem(value=v, tolerance=tolerance, count=c) for v, c in counts.items())
    return replace(rule, stock=tuple(items))


def of_each(series: str, count: int, smallest: float = 1e3, largest: float = 1e5) -> PartRule:
    """A drawer with the same count of every value of a series."""
    plain = replace(resistor_rule(series), smallest=smallest, largest=largest)
    return stocked(plain, dict.fromkeys(map(float, plain.values), count))


def overdrawn(circuit: Circuit) -> list[float]:
    """Values of which the circuit uses more than the stock has."""
    used = Counter((p.kind, p.value) for p in circuit.bought)
    rules = {p.kind: p.rule for p in circuit.bought}
    out = []
    for (kind, value), number in used.items():
        count = rules[kind].count_of(value)
        if count is not None and number > count:
            out.append(value)
    return out


@pytest.mark.parametrize("form", ["controllable", "cascade"])
@pytest.mark.parametrize("count", [1, 2])
def test_a_choice_takes_no_more_parts_than_there_are(form: str, count: int) -> None:
    """With one or two resistors of each E12 value; without counts it would take more."""
    job = job_for(butterworth(4, 1e3), BAND, resistors=of_each("E12", count))
    circuit = sketch_form(job, form, FREQUENCY).circuit
    target = job.target.response(FREQUENCY)
    chosen = choose_values(circuit, target=target, frequency_hz=FREQUENCY, effort=8_000_000)
    assert overdrawn(chosen.circuit) == []
    assert overdrawn(chosen.nearest)


def test_the_choice_is_the_best_the_counts_allow() -> None:
    """A lossy integrator: every choice within the counts is tried.  The best without counts
    uses the one 10 kohm twice."""
    target = TransferFunction.from_factors(-2e3, [], [Factor.real(-2e3)])
    counts = {8.2e3: 1, 10e3: 1, 12e3: 2, 15e3: 1, 47e3: 2, 56e3: 1}
    job = job_for(
        target,
        BAND,
        resistors=stocked(resistor_rule(), counts),
        capacitors=stocked(capacitor_rule(), {10e-9: 1, 33e-9: 1, 47e-9: 1}),
    )
    circuit = sketch_form(job, "observable", FREQUENCY).circuit
    response = target.response(FREQUENCY)
    choice = choose_values(circuit, target=response, frequency_hz=FREQUENCY, effort=5_000_000)
    program, grid = compile_circuit(circuit), ValueGrid(circuit.passives)
    every = [np.array(v) for v in itertools.product(*grid.values)]
    allowed = [v for v in every if not overdrawn(with_values(circuit, v))]
    squares = Goal(response, FREQUENCY).mean_squares(program, np.array(allowed))
    best = allowed[int(np.argmin(squares))]
    assert [p.value for p in choice.circuit.passives] == best.tolist()
    free = Goal(response, FREQUENCY).mean_squares(program, np.array(every))
    assert np.min(free) < np.min(squares)


def with_values(circuit: Circuit, values: np.ndarray) -> Circuit:
    refs = [p.ref for p in circuit.passives]
    return circuit.with_values(dict(zip(refs, map(float, values), strict=True)))


def scarce() -> tuple[Supply, LinearModel, Circuit]:
    job = job_for(butterworth(3, 1e3), BAND, resistors=of_each("E6", 1))
    circuit = sketch_form(job, "controllable", FREQUENCY).circuit
    grid = ValueGrid(circuit.passives)
    supply = Supply.of(grid)
    assert supply is not None
    values = np.array([p.value for p in circuit.passives])
    goal = Goal(job.target.response(FREQUENCY), FREQUENCY)
    return supply, LinearModel.about(compile_circuit(circuit), values, goal), circuit


def test_steps_are_allowed_exactly_where_the_counts_hold_after_them() -> None:
    """Every single step and every pair, swaps included, counted afresh."""
    supply, model, circuit = scarce()
    grid = supply.grid
    index = supply.repaired(grid.nearest(np.log([p.value for p in circuit.passives])), model)
    part = np.repeat(np.arange(index.size), 4)
    step = np.tile([1, 2, -1, -2], index.size)
    target = index[part] + step
    inside = (target >= 0) & (target < grid.counts[part])
    part, target = part[inside], target[inside]
    single, pair = supply.steps(index, part, target)
    swaps = 0
    for i in range(part.size):
        moved = index.copy()
        moved[part[i]] = target[i]
        assert single[i] == supply.suffices(moved)
        for j in range(part.size):
            if part[j] == part[i]:
                continue
            both = moved.copy()
            both[part[j]] = target[j]
            assert pair[i, j] == supply.suffices(both)
            swaps += bool(pair[i, j]) and not single[i]
    assert swaps


def test_a_repair_uses_what_is_there_and_touches_nothing_else() -> None:
    supply, model, circuit = scarce()
    index = supply.grid.nearest(np.log([p.value for p in circuit.passives]))
    index[supply.grid.resistors] = 6
    index = supply.repaired(index, model)
    assert supply.suffices(index)
    assert np.sum(index[supply.grid.resistors] == 6) == 1
    assert np.array_equal(supply.repaired(index, model), index)


def test_enough_of_everything_needs_no_supply() -> None:
    job = job_for(butterworth(2, 1e3), BAND)
    assert Supply.of(ValueGrid(sketch_form(job, "cascade", FREQUENCY).circuit.passives)) is None


def test_too_few_parts_are_refused_with_both_numbers() -> None:
    """In the flow, and in a choice of values alone."""
    few = stocked(resistor_rule(), {10e3: 2, 22e3: 1})
    with pytest.raises(RealizationError, match=r"needs \d resistors, the stock has 3 from 1 kohm"):
        sketch_form(job_for(butterworth(2, 1e3), BAND, resistors=few), "cascade", FREQUENCY)
    circuit = sketch_form(job_for(butterworth(2, 1e3), BAND), "cascade", FREQUENCY).circuit
    parts = [replace(p, rule=few) if p.kind == "resistor" else p for p in circuit.passives]
    with pytest.raises(RealizationError, match="the stock has 3"):
        check_supply(parts)


def test_capacitors_are_shared_out_before_the_levels_are_set() -> None:
    """Three integrators, one 10 nF and two 4.7 nF: all are used."""
    caps = stocked(capacitor_rule(), {4.7e-9: 2, 10e-9: 1})
    job = job_for(butterworth(3, 1e3), BAND, capacitors=caps)
    circuit = sketch_form(job, "controllable", FREQUENCY).circuit
    values = sorted(p.value for p in circuit.bought if p.kind == "capacitor")
    assert values == [4.7e-9, 4.7e-9, 10e-9]


def test_the_tightest_parts_go_first_and_only_as_far_as_they_reach() -> None:
    items = (
        StockItem(value=10e3, tolerance=0.01, count=5),
        StockItem(value=10e3, tolerance=0.001, count=2),
        StockItem(value=22e3, tolerance=0.05),
    )
    rule = replace(resistor_rule(), stock=items)
    circuit = sketch_form(
        job_for(butterworth(2, 1e3), BAND, resistors=of_each("E12", 9)), "cascade", FREQUENCY
    ).circuit
    refs = [p.ref for p in circuit.bought if p.kind == "resistor"]
    values = dict.fromkeys(refs, 10e3) | {refs[1]: 22e3}
    circuit = replace(
        circuit,
        passives=tuple(
            replace(p, rule=rule) if p.kind == "resistor" else p for p in circuit.passives
        ),
    ).with_values(values)
    found = [p.tolerance for p in allotted(circuit).bought if p.kind == "resistor"]
    assert found[:4] == [0.001, 0.05, 0.001, 0.01]
    moved = allotted(circuit).with_values({refs[3]: 22e3})
    assert moved.by_ref[refs[3]].tolerance == 0.05


def test_a_stock_stands_in_for_the_series() -> None:
    """Values within the range, tolerance of the line, ends of the drawer."""
    counts = {500.0: 1, 2e3: 2, 5e3: None}
    rule = stocked(resistor_rule(), counts, tolerance=0.02)
    assert rule.values.tolist() == [2e3, 5e3]
    assert (rule.source, rule.ends) == ("stock", (2e3, 5e3))
    assert (rule.count_of(2e3), rule.count_of(5e3)) == (2, None)
    assert rule.tolerance_of(2e3) == rule.tolerance_of(2.1e3) == 0.02
    assert resistor_rule().ends == (1e3, 1e6)
