"""The exact search finds what trying everything finds, with every limit there is."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace

import numpy as np
import pytest

from synth.choosing.choose import choose_values, with_ideal_op_amps
from synth.choosing.completion import Completion, aligned, best_choices
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Goal, LevelLimits, LinearModel
from synth.choosing.settling import Problem, settle
from synth.choosing.supply import Supply
from synth.circuit import Circuit
from synth.nodal import compile_circuit
from synth.parts import StockItem
from tests.synth.choosing.test_certificate import FREQUENCY, every_square, models, small


def all_choices(grid: ValueGrid) -> np.ndarray:
    """Every index vector, shape (N, P), in the order of `every_square`."""
    return np.stack(np.meshgrid(*(range(n) for n in grid.counts), indexing="ij"), -1).reshape(
        -1, grid.counts.size
    )


@pytest.mark.parametrize("form", ["observable", "controllable"])
def test_the_best_of_all_choices_come_in_their_order(form: str) -> None:
    """Eight parts of E3: the best forty, one by one, are those of brute force."""
    circuit, target = small(2, form, "E3")
    grid, model, _ = models(circuit, target)
    model = aligned(model, grid)
    squares = every_square(grid, model) - model.floor
    found = best_choices(grid, model, below=np.inf)
    assert found is not None
    expected = np.sort(squares)[: found.squares.size]
    np.testing.assert_allclose(found.squares[:40], expected[:40], rtol=1e-6, atol=1e-15)
    again = [model.mean_square(grid.logs_at(k)) - model.floor for k in found.index[:40]]
    np.testing.assert_allclose(again, found.squares[:40], rtol=1e-6, atol=1e-15)


def test_limits_of_levels_exclude_choices_and_the_best_of_the_rest_comes_first() -> None:
    """A bound on one part's logarithm, through the middle of the best choices."""
    circuit, target = small(2, "observable", "E3")
    grid, model, _ = models(circuit, target)
    model = aligned(model, grid)
    squares, every = every_square(grid, model) - model.floor, all_choices(grid)
    part = next(k for k, p in enumerate(circuit.passives) if p.ref == "C1")
    row = np.zeros((1, grid.counts.size))
    row[0, part] = 1.0
    best = every[np.argmin(squares)]
    below = grid.logs[part, best[part]] - model.reference[part] - 0.01
    limits = LevelLimits(row, np.array([below]), model.reference)
    held = grid.logs[part, every[:, part]] - model.reference[part] <= below
    found = best_choices(grid, model, below=np.inf, limits=limits)
    assert found is not None
    assert found.squares[0] == pytest.approx(np.min(squares[held]), rel=1e-6)
    assert found.squares[0] > np.min(squares)
    assert all(limits.hold(grid.logs_at(k)) for k in found.index)


def test_a_stock_with_two_of_each_value_is_respected() -> None:
    """No value is used more often than it is there, and nothing better is overlooked."""
    circuit, target = small(2, "observable", "E3")
    resistors = tuple(
        StockItem(value=x, tolerance=0.01, count=2) for x in (4.7e3, 10e3, 22e3, 33e3, 47e3)
    )
    parts = tuple(
        replace(p, rule=replace(p.rule, stock=resistors)) if p.kind == "resistor" and p.rule else p
        for p in circuit.passives
    )
    circuit = replace(circuit, passives=parts)
    grid, model, _ = models(circuit, target)
    model = aligned(model, grid)
    supply = Supply.of(grid)
    assert supply is not None
    squares, every = every_square(grid, model) - model.floor, all_choices(grid)
    order = np.argsort(squares, kind="stable")
    first = next(k for k in order if supply.suffices(every[k]))
    found = best_choices(grid, model, below=np.inf, supply=supply)
    assert found is not None
    assert found.squares[0] == pytest.approx(squares[first], rel=1e-6)
    used = Counter(
        grid.values[k][found.index[0][k]]
        for k, p in enumerate(circuit.passives)
        if p.kind == "resistor"
    )
    assert max(used.values()) <= 2


def test_sums_of_a_class_are_its_values() -> None:
    """Each sum is the effect of the combination it points to, and they ascend."""
    circuit, target = small(2, "observable", "E3")
    grid, model, _ = models(circuit, target)
    model = aligned(model, grid)
    completion = Completion.of(model, grid)
    assert completion is not None
    assert len(completion.parts) >= 2
    assert np.all(np.diff(completion.sums) >= 0)
    places = np.arange(completion.sums.size)
    values = completion.values_of(places)
    effect = np.zeros((model.offset.size, places.size))
    for k, index in zip(completion.parts, values, strict=True):
        effect += np.outer(model.matrix[:, k], grid.logs[k, index] - model.reference[k])
    np.testing.assert_allclose(completion.direction @ effect, completion.sums, atol=1e-12)
    across = effect - np.outer(completion.direction, completion.sums)
    np.testing.assert_allclose(across, 0.0, atol=1e-9)


def test_nothing_below_what_is_asked_is_an_empty_answer_and_too_much_is_none() -> None:
    circuit, target = small(2, "observable", "E3")
    grid, model, _ = models(circuit, target)
    model = aligned(model, grid)
    least = float(np.min(every_square(grid, model))) - model.floor
    found = best_choices(grid, model, below=least * (1 - 1e-6))
    assert found is not None
    assert found.squares.size == 0
    assert best_choices(grid, model, below=np.inf, largest_frontier=3) is None


def settled(circuit: Circuit, target: np.ndarray, effort: int) -> tuple[Problem, np.ndarray]:
    grid = ValueGrid(circuit.passives)
    problem = Problem(
        program=compile_circuit(circuit),
        ideal=compile_circuit(with_ideal_op_amps(circuit)),
        goal=Goal(target, FREQUENCY),
        grid=grid,
        ceilings=None,
        supply=None,
    )
    start = grid.nearest(np.log([p.ideal for p in circuit.passives]))
    index, certificate, _ = settle(problem, start, rng=np.random.default_rng(1), effort=effort)
    assert certificate.rms >= certificate.lower_bound
    return problem, index


def test_settling_finds_the_best_of_all_by_the_nodal_engine() -> None:
    """Every choice of eight parts solved with its op-amps, against a start by rounding."""
    circuit, target = small(2, "observable", "E3")
    problem, index = settled(circuit, target, 3 * 10**7)
    every = all_choices(problem.grid)
    values = np.stack([v[every[:, k]] for k, v in enumerate(problem.grid.values)], axis=1)
    squares = problem.goal.mean_squares(problem.program, values)
    assert problem.judged(index[None])[0] == pytest.approx(np.min(squares), rel=1e-6)


def test_subsets_never_make_a_choice_worse_and_repeat_themselves() -> None:
    """Eleven parts of E24, too many for the exact search of all: better than the start, the same
    for the same seed."""
    circuit, target = small(3, "controllable", "E24")
    problem, index = settled(circuit, target, 3 * 10**7)
    _, again = settled(circuit, target, 3 * 10**7)
    start = problem.grid.nearest(np.log([p.ideal for p in circuit.passives]))
    before, after = problem.judged(np.array([start, index]))
    assert after < before / 4
    np.testing.assert_array_equal(index, again)


@pytest.mark.parametrize("series", ["E24", "E96"])
def test_eight_parts_over_a_whole_series_are_settled(series: str) -> None:
    """Three decades of resistors and more of capacitors: every choice is excluded or looked at,
    and what is left unproven is a few percent."""
    from synth.candidates import sketch_form
    from tests.jobs import capacitor_rule, job_for, resistor_rule
    from tests.strategies import butterworth

    target = butterworth(2, 1e3)
    job = job_for(
        target,
        (100.0, 2e3),
        form="observable",
        resistors=resistor_rule(series),
        capacitors=capacitor_rule("E6"),
    )
    circuit = sketch_form(job, "observable", FREQUENCY).circuit
    response = target.response(FREQUENCY)
    found = choose_values(circuit, target=response, frequency_hz=FREQUENCY, effort=10_000_000)
    assert found.certificate.exhausted
    assert found.certificate.gap < 0.1
    model = LinearModel.about(
        compile_circuit(circuit),
        np.array([p.value for p in found.circuit.passives]),
        Goal(response, FREQUENCY),
    )
    assert np.sqrt(model.offset @ model.offset + model.floor) == pytest.approx(
        found.certificate.rms, rel=1e-6
    )
