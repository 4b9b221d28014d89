"""Few choices are all solved: the best of them against a loop that solves one at a time."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.choosing.enumeration import best_of_all
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Ceilings, Goal
from synth.nodal import compile_circuit
from tests.jobs import capacitor_rule, job_for, resistor_rule
from tests.strategies import butterworth

FREQUENCY = np.geomspace(100.0, 2e3, 40)
OPEN = {"R1", "C1"}


def problem():
    """A second-order low-pass of which one resistor and one capacitor are open."""
    target = butterworth(2, 1e3)
    job = job_for(
        target, (100.0, 2e3), resistors=resistor_rule("E12"), capacitors=capacitor_rule("E3")
    )
    circuit = sketch_form(job, "controllable", FREQUENCY).circuit
    passives = tuple(replace(p, fixed=p.ref not in OPEN) for p in circuit.passives)
    circuit = replace(circuit, passives=passives)
    return circuit, ValueGrid(passives), Goal(target.response(FREQUENCY), FREQUENCY)


def test_the_best_of_all_is_the_best_of_a_plain_loop() -> None:
    """Every pair of values, each solved on its own, errors taken from the definition."""
    circuit, grid, goal = problem()
    found = best_of_all(compile_circuit(circuit), grid, goal)
    assert found is not None
    offered = {p.ref: grid.values[k] for k, p in enumerate(circuit.passives) if p.ref in OPEN}
    errors = {}
    for values in itertools.product(*offered.values()):
        board = circuit.with_values(dict(zip(offered, map(float, values), strict=True)))
        error = np.log(compile_circuit(board).solve(FREQUENCY) / goal.target)
        errors[values] = float(np.sqrt(np.mean(np.abs(error) ** 2)))
    best = min(errors, key=lambda v: errors[v])
    chosen = dict(zip((p.ref for p in circuit.passives), grid.values_at(found.index), strict=True))
    assert tuple(chosen[ref] for ref in offered) == best
    assert found.rms == pytest.approx(errors[best], rel=1e-9)
    assert found.looked == len(errors)


def test_a_choice_beyond_the_ceilings_is_not_taken_unless_all_are() -> None:
    """A ceiling below what the best choice of all reaches rules it out; one below what any
    choice reaches rules out none."""
    circuit, grid, goal = problem()
    program = compile_circuit(circuit)
    free = best_of_all(program, grid, goal)
    assert free is not None

    def ceiling(ratio: float) -> Ceilings:
        gain = abs(program.solve([500.0], values=grid.values_at(free.index), nets=["out"])[0, 0])
        return Ceilings(("out",), np.array([500.0]), np.array([ratio * gain]), np.zeros(1))

    held = best_of_all(program, grid, goal, ceiling(0.98))
    assert held is not None
    reached = abs(program.solve([500.0], values=grid.values_at(held.index), nets=["out"])[0, 0])
    assert reached <= ceiling(0.98).highest[0]
    assert held.rms > free.rms
    fallen_back = best_of_all(program, grid, goal, ceiling(1e-9))
    assert fallen_back is not None
    np.testing.assert_array_equal(fallen_back.index, free.index)


def test_more_choices_than_allowed_are_left_to_the_search() -> None:
    """The limit counts choices, not parts."""
    circuit, grid, goal = problem()
    total = int(np.prod(grid.counts))
    program = compile_circuit(circuit)
    assert best_of_all(program, grid, goal, largest=total - 1) is None
    assert best_of_all(program, grid, goal, largest=total) is not None
