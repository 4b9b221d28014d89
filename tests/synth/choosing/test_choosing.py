"""The chosen values are far better than nearest rounding, and optimal where all can be tried."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.choosing import choose_values
from synth.choosing.descent import Neighbourhood
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Goal, LinearModel
from synth.evidence import response_error
from synth.grid import judging_frequencies
from synth.limits import swings
from synth.nodal import compile_circuit
from synth.preferred import is_member
from synth.transfer import Factor, TransferFunction
from synth.values import ValueSearch, level_limits
from tests.jobs import capacitor_rule, job_for, resistor_rule
from tests.strategies import butterworth

BAND = (100.0, 2e3)
FREQUENCY = np.geomspace(*BAND, 61)


def sketched(order: int, form: str, series: str = "E96"):
    job = job_for(butterworth(order, 1e3), BAND, form=form, resistors=resistor_rule(series))
    return sketch_form(job, form, FREQUENCY).circuit, job.target.response(FREQUENCY)


@pytest.mark.parametrize(
    ("order", "form", "series"), [(2, "controllable", "E96"), (3, "cascade", "E24")]
)
def test_error_is_far_below_nearest_rounding(order: int, form: str, series: str) -> None:
    """At most one fifth, with every value from its series."""
    circuit, target = sketched(order, form, series)
    choice = choose_values(circuit, target=target, frequency_hz=FREQUENCY, effort=20_000_000)
    chosen = response_error(compile_circuit(choice.circuit).solve(FREQUENCY), target).rms
    nearest = response_error(compile_circuit(choice.nearest).solve(FREQUENCY), target).rms
    assert chosen < nearest / 5
    for part in choice.circuit.bought:
        assert is_member(series if part.kind == "resistor" else "E12", part.value)
        assert part.rule.smallest <= part.value <= part.rule.largest
        assert abs(part.value / part.ideal - 1) < 0.25


def test_same_seed_same_values() -> None:
    """The search depends on its seed and nothing else."""
    circuit, target = sketched(2, "cascade")
    first, second = (
        choose_values(circuit, target=target, frequency_hz=FREQUENCY, seed=7, effort=3_000_000)
        for _ in range(2)
    )
    assert first.circuit == second.circuit


def test_small_circuit_gets_the_best_values_there_are() -> None:
    """A lossy integrator with an inverter's worth of parts: every combination of values is
    tried, and none is better than the choice."""
    target = TransferFunction.from_factors(-2e3, [], [Factor.real(-3e3)])
    job = job_for(
        target,
        BAND,
        resistors=resistor_rule("E12"),
        capacitors=capacitor_rule("E6"),
        form="observable",
    )
    circuit = sketch_form(job, "observable", FREQUENCY).circuit
    assert len(circuit.passives) == 3
    response = target.response(FREQUENCY)
    choice = choose_values(circuit, target=response, frequency_hz=FREQUENCY, effort=10_000_000)
    chosen = response_error(compile_circuit(choice.circuit).solve(FREQUENCY), response).rms
    grid = ValueGrid(circuit.passives)
    program = compile_circuit(circuit)
    every = np.array(list(itertools.product(*(v for v in grid.values))))
    # Only combinations whose corner and gain are within 15 % can be best.
    r_in, r_loss, c = (every[:, k] for k in range(3))
    near = (np.abs(1 / (r_loss * c) / 3e3 - 1) < 0.15) & (np.abs(1 / (r_in * c) / 2e3 - 1) < 0.15)
    best = np.sqrt(np.min(Goal(response, FREQUENCY).mean_squares(program, every[near])))
    assert chosen <= best * (1 + 1e-9)


def test_linear_model_is_the_response_error_near_its_reference() -> None:
    """Changes of a percent: the model and the nodal engine agree to a few percent; along a
    free scale, however far, nothing moves."""
    circuit, target = sketched(3, "controllable")
    program = compile_circuit(circuit)
    values = np.array([p.value for p in circuit.passives])
    model = LinearModel.about(program, values, Goal(target, FREQUENCY))
    rng = np.random.default_rng(4)
    for _ in range(5):
        logs = np.log(values) + rng.normal(0, 0.01, values.size)
        (square,) = Goal(target, FREQUENCY).mean_squares(program, np.exp(logs)[None])
        assert model.mean_square(logs) == pytest.approx(square, rel=0.1)
    cell = next(c for c in circuit.cells if c.kind == "integrator")
    logs = np.log(values)
    for k, part in enumerate(circuit.passives):
        if part.ref in cell.inputs:
            logs[k] += 0.7
        if part.ref == cell.feedback:
            logs[k] -= 0.7
    (square,) = Goal(target, FREQUENCY).mean_squares(program, np.exp(logs)[None])
    assert np.sqrt(model.mean_square(logs)) == pytest.approx(np.sqrt(square), abs=3e-4)


def test_descent_ends_where_no_pair_of_steps_gains() -> None:
    """Checked by computing every single and pair move from the result."""
    circuit, target = sketched(2, "cascade", "E24")
    program = compile_circuit(circuit)
    values = np.array([p.value for p in circuit.passives])
    model = LinearModel.about(program, values, Goal(target, FREQUENCY))
    grid = ValueGrid(circuit.passives)
    index, cost, _ = Neighbourhood(grid, model, reach=(1,)).descend(grid.nearest(np.log(values)))
    moves = [(k, m) for k in range(index.size) for m in (-1, 1)]
    for (a, m), (b, n) in itertools.product(moves, moves):
        if a == b and m != n:
            continue
        trial = index.copy()
        trial[a] += m
        if b != a:
            trial[b] += n
        if np.any(trial < 0) or np.any(trial >= grid.counts):
            continue
        residual = model.residual(grid.logs_at(trial))
        assert residual @ residual >= cost * (1 - 1e-6)


@pytest.mark.parametrize("series", ["E12", "E96"])
def test_outputs_that_hang_on_small_differences_stay_below_the_rails(series: str) -> None:
    """A zero next to a pole leaves an integrator the small difference of two currents, which no
    linear model about the ideal values foresees: every output but the board's stays below the
    rail with the chosen values."""

    def w(hz: float) -> float:
        return 2 * np.pi * hz

    poles = [Factor.pair(w(1173.1), 17.0), Factor.real(-w(399.8))]
    zeros = [Factor.real(-w(523.9)), Factor.real(0), Factor.real(-w(401.0))]
    plain = TransferFunction.from_factors(1, zeros, poles)
    gain = 0.12 / float(np.abs(plain.response(np.array([1173.1]))[0]))
    target = TransferFunction.from_factors(gain, zeros, poles)
    job = job_for(
        target,
        (133.0, 3520.0),
        resistors=resistor_rule(series),
        capacitors=capacitor_rule("E6"),
        form="cascade",
        input_peak=33.5,
    )
    frequency = judging_frequencies(target, (133.0, 3520.0))
    sketch = sketch_form(job, "cascade", frequency)
    response = target.response(frequency)
    search = ValueSearch(sketch, job, response, frequency, seed=1, effort=10_000_000)
    choice, _ = search.both(lambda *_: None)
    inner = [s for s in swings(choice.circuit, target, job) if s.net != "out"]
    assert max(s.peak for s in inner) <= inner[0].peak_limit


@pytest.mark.parametrize("series", ["E6", "E24", "E96"])
def test_levels_and_impedances_stay_where_the_scaling_put_them(series: str) -> None:
    """The response does not show the free scales, but noise and offset do: no internal level
    falls below 0.6 of what it was, no capacitor, feedback or inverter resistor leaves a range
    of 2.5 either way, and the noise at the output at most doubles."""
    job = job_for(
        butterworth(3, 1e3),
        BAND,
        form="cascade",
        resistors=resistor_rule(series),
    )
    sketch = sketch_form(job, "cascade", FREQUENCY)
    choice = choose_values(
        sketch.circuit,
        target=job.target.response(FREQUENCY),
        frequency_hz=FREQUENCY,
        level_limits=level_limits(sketch, job),
        effort=10_000_000,
    )
    before, after = compile_circuit(sketch.circuit), compile_circuit(choice.circuit)
    nets = [c.output for c in sketch.circuit.cells if c.output != "out"]
    ratio = np.abs(after.solve(FREQUENCY, nets=nets) / before.solve(FREQUENCY, nets=nets))
    assert np.min(ratio) > 0.55
    for cell in sketch.circuit.cells:
        refs = [cell.feedback, *(cell.inputs if cell.kind == "inverter" else ())]
        for ref in refs:
            moved = choice.circuit.by_ref[ref].value / sketch.circuit.by_ref[ref].ideal
            assert 1 / 2.51 < moved < 2.51
    fine = np.geomspace(*BAND, 200)
    noise = [np.trapezoid(p.noise(fine).total, fine) for p in (before, after)]
    assert noise[1] < 4 * noise[0]


def test_ideal_values_are_those_with_which_the_circuit_shows_the_target() -> None:
    """With every resistor at its `ideal` and the capacitors as chosen, what is left of the
    error is far below that of the chosen values, and near them."""
    circuit, target = sketched(3, "cascade", "E24")
    choice = choose_values(circuit, target=target, frequency_hz=FREQUENCY, effort=2_000_000)
    exact = choice.circuit.with_values({p.ref: p.ideal for p in choice.circuit.passives})
    chosen, ideal = (
        response_error(compile_circuit(c).solve(FREQUENCY), target).rms
        for c in (choice.circuit, exact)
    )
    assert ideal < chosen / 5
    assert all(abs(p.value / p.ideal - 1) < 0.1 for p in choice.circuit.passives)
