"""Bounds hold for every choice there is, and the proof finds what brute force finds."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest
import scipy.optimize

from synth.candidates import sketch_form
from synth.choosing.binding import Frontier, binding_order, outside
from synth.choosing.certificate import certify
from synth.choosing.choose import choose_values, with_ideal_op_amps
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Goal, LinearModel
from synth.circuit import Circuit
from synth.evidence import response_error
from synth.nodal import compile_circuit
from synth.parts import PartRule
from synth.transfer import Factor, TransferFunction
from tests.jobs import job_for
from tests.strategies import butterworth

BAND = (100.0, 2e3)
FREQUENCY = np.geomspace(*BAND, 31)


def narrow(kind: str, series: str, smallest: float, largest: float) -> PartRule:
    return PartRule(kind=kind, series=series, tolerance=0.01, smallest=smallest, largest=largest)


def small(order: int, form: str, series: str = "E6") -> tuple[Circuit, np.ndarray]:
    """A circuit whose every choice of values can be tried."""
    target = butterworth(order, 1e3)
    if order == 1:
        target = TransferFunction.from_factors(-2e3, [], [Factor.real(-3e3)])
    job = job_for(
        target,
        BAND,
        form=form,
        resistors=narrow("resistor", series, 4.7e3, 47e3),
        capacitors=narrow("capacitor", "E6", 3.3e-9, 33e-9),
    )
    return sketch_form(job, form, FREQUENCY).circuit, target.response(FREQUENCY)


def models(circuit: Circuit, target: np.ndarray) -> tuple[ValueGrid, LinearModel, np.ndarray]:
    goal = Goal(target, FREQUENCY)
    program = compile_circuit(circuit)
    ideal = compile_circuit(with_ideal_op_amps(circuit))
    values = np.array([p.value for p in circuit.passives])
    grid = ValueGrid(circuit.passives)
    model = LinearModel.about(program, values, goal, jacobian=ideal)
    return grid, model, grid.nearest(np.log(values))


def every_square(grid: ValueGrid, model: LinearModel) -> np.ndarray:
    """The model's mean square of every choice there is."""
    choices = np.array(list(itertools.product(*(range(n) for n in grid.counts))))
    logs = grid.logs[np.arange(grid.counts.size), choices]
    residuals = (logs - model.reference) @ model.matrix.T + model.offset
    return np.sum(residuals**2, axis=1) + model.floor


@pytest.mark.parametrize(
    ("order", "form", "series"), [(1, "observable", "E12"), (2, "observable", "E3")]
)
def test_no_choice_is_below_the_bound_and_the_proof_finds_the_best(
    order: int, form: str, series: str
) -> None:
    """Against every combination of values, tried one by one."""
    circuit, target = small(order, form, series)
    grid, model, start = models(circuit, target)
    best = float(np.sqrt(np.min(every_square(grid, model))))
    found = certify(grid, model, start)
    assert found.lower_bound <= best * (1 + 1e-9)
    assert found.exhausted
    if found.better is not None:
        reached = float(np.sqrt(model.mean_square(grid.logs_at(found.better[0]))))
        assert reached == pytest.approx(best, rel=1e-9)
        again = certify(grid, model, found.better[0])
        assert again.proven
        assert again.gap == pytest.approx(0.0, abs=1e-9)
    else:
        assert found.proven
        assert found.rms == pytest.approx(best, rel=1e-9)


@pytest.mark.parametrize("largest", [1, 20, 300, 10_000])
def test_bound_of_an_unfinished_search_still_holds(largest: int) -> None:
    """However few assignments may be held, no choice is below the bound."""
    circuit, target = small(2, "observable", "E3")
    grid, model, start = models(circuit, target)
    best = float(np.sqrt(np.min(every_square(grid, model))))
    found = certify(grid, model, start, largest_frontier=largest)
    assert 0 <= found.lower_bound <= best * (1 + 1e-9)
    assert not found.proven or found.rms <= best * 1.0011


def test_whole_choice_is_the_best_by_brute_force_with_the_nodal_engine() -> None:
    """A first-order board: every combination solved by the nodal engine, op-amps included."""
    circuit, target = small(1, "observable", "E12")
    choice = choose_values(circuit, target=target, frequency_hz=FREQUENCY, effort=5_000_000)
    grid = ValueGrid(circuit.passives)
    every = np.array(list(itertools.product(*grid.values)))
    squares = Goal(target, FREQUENCY).mean_squares(compile_circuit(circuit), every)
    chosen = response_error(compile_circuit(choice.circuit).solve(FREQUENCY), target).rms
    assert chosen == pytest.approx(float(np.sqrt(squares.min())), rel=1e-9)
    assert choice.certificate.proven


def test_the_damping_pair_binds_first() -> None:
    """In a two-integrator loop the damping hangs on one R and one C alone, and the bound is
    what their series can do: the least |ln(R C / wanted)| over all pairs."""
    circuit, target = small(2, "observable", "E12")
    grid, model, _ = models(circuit, target)
    order, binding = binding_order(model.matrix, grid)
    first = {circuit.passives[k].ref for k in order[:2]}
    cell = next(c for c in circuit.cells if c.output == "out")
    damping = next(r for r in cell.inputs if "out" in circuit.by_ref[r].nets)
    assert first == {damping, cell.feedback}
    assert binding >= 2
    away = outside(model.matrix[:, order[2:]])
    assert away.shape[0] == 1
    grown = Frontier.start(model, grid)
    for place in range(2):
        columns = model.matrix[:, order[place + 1 :]]
        step = grown.grown(order[place], columns, below=np.inf, largest=10**6)
        assert step is not None
        grown = step
    bounds = np.sqrt(grown.bounds(model.matrix[:, order[2:]]))
    r, c = (grid.values[k] for k in order[:2])
    wanted = circuit.passives[order[0]].value * circuit.passives[order[1]].value
    deviation = np.abs(np.log(np.multiply.outer(r, c) / wanted)).ravel()
    slope = np.abs(away @ model.matrix[:, order[0]])[0]
    start = np.abs(away @ model.offset)[0]
    assert bounds.min() == pytest.approx(slope * deviation.min(), abs=start + 1e-9)


def test_integer_programme_of_the_linear_model_has_the_same_optimum() -> None:
    """scipy.optimize.milp on the same linear model, with the largest instead of the mean
    square residual: neither optimum may contradict the other."""
    circuit, target = small(1, "observable", "E12")
    grid, model, start = models(circuit, target)
    found = certify(grid, model, start)
    best = start if found.better is None else found.better[0]
    counts = [int(n) for n in grid.counts]
    total = sum(counts)
    offsets = np.concatenate([[0], np.cumsum(counts)])
    effect = np.zeros((model.offset.size, total + 1))
    for k, n in enumerate(counts):
        change = grid.logs[k, :n] - model.reference[k]
        effect[:, offsets[k] : offsets[k + 1]] = np.outer(model.matrix[:, k], change)
    one = np.zeros((len(counts), total + 1))
    for k in range(len(counts)):
        one[k, offsets[k] : offsets[k + 1]] = 1
    upper, lower = effect.copy(), -effect
    upper[:, -1] = lower[:, -1] = -1
    result = scipy.optimize.milp(
        np.concatenate([np.zeros(total), [1.0]]),
        constraints=[
            scipy.optimize.LinearConstraint(upper, -np.inf, -model.offset),
            scipy.optimize.LinearConstraint(lower, -np.inf, model.offset),
            scipy.optimize.LinearConstraint(one, 1, 1),
        ],
        integrality=np.concatenate([np.ones(total), [0]]),
        bounds=scipy.optimize.Bounds(0, np.concatenate([np.ones(total), [np.inf]])),
    )
    picked = np.array(
        [int(np.argmax(result.x[offsets[k] : offsets[k + 1]])) for k in range(len(counts))]
    )
    ours = np.abs(model.residual(grid.logs_at(best)))
    theirs = np.abs(model.residual(grid.logs_at(picked)))
    assert np.max(theirs) <= np.max(ours) * (1 + 1e-6)
    assert np.sum(ours**2) <= np.sum(theirs**2) * (1 + 1e-6)


def test_fixed_values_are_kept_and_the_rest_makes_up_for_them() -> None:
    """A capacitor stated by hand stays, and the error is still far below nearest rounding."""
    job = job_for(butterworth(2, 1e3), BAND, form="observable")
    circuit = sketch_form(job, "observable", FREQUENCY).circuit
    fixed = tuple(
        replace(p, fixed=True, value=p.ideal) if p.kind == "capacitor" else p
        for p in circuit.passives
    )
    target = job.target.response(FREQUENCY)
    choice = choose_values(
        replace(circuit, passives=fixed),
        target=target,
        frequency_hz=FREQUENCY,
        effort=10_000_000,
    )
    for before, after in zip(fixed, choice.circuit.passives, strict=True):
        if before.fixed:
            assert after.value == before.value


def test_a_choice_without_a_choice_is_proven() -> None:
    """Every part fixed: nothing is better, whatever rounding makes of the bound."""
    circuit, target = small(2, "controllable")
    passives = tuple(replace(p, fixed=True) for p in circuit.passives)
    grid, model, index = models(replace(circuit, passives=passives), target)
    found = certify(grid, model, index)
    assert found.proven
    assert found.better is None
    assert set(found.held) == {p.ref for p in passives if p.on_board}
