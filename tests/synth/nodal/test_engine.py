"""The compiled elimination: what it computes, and that its fallbacks are taken."""

import numpy as np
import pytest

from synth.circuit import Circuit
from synth.nodal import compile_circuit, dense
from synth.nodal.elimination import plan
from synth.nodal.engine import Boards, Engine, choose_engine
from synth.nodal.reduction import DEGREE, quantities, reduce
from synth.nodal.structure import structure_of
from tests.synth.nodal.boards import (
    amplifier,
    capacitor,
    chain,
    op_amp,
    random_circuit,
    resistor,
    tow_thomas,
)

GRID = 2j * np.pi * np.geomspace(1.0, 1e7, 15)


def nominal(structure, count=1):
    return Boards(
        *(
            np.tile(a, (count, 1))
            for a in (structure.values, structure.gain_bandwidth, structure.open_loop_gain)
        )
    )


def exact(structure, boards, s, observed=None):
    """All unknowns in extended precision, shape (unknowns, boards, F)."""
    board, point = np.indices((boards.count, s.size)).reshape(2, -1)
    y, a = boards.samples(structure, s, board, point)
    solved, _ = dense.reference(structure, y, a, observed=observed)
    return solved.T.reshape(-1, boards.count, s.size)


@pytest.mark.parametrize("seed", range(20))
def test_reduced_equations_hold_for_the_full_solution(seed):
    """Every reduced row, evaluated from its polynomials, vanishes on the voltages of the full
    equations (to rounding, where they are not themselves zero); as many rows as unknowns."""
    structure = structure_of(random_circuit(np.random.default_rng([40, seed])))
    system = reduce(structure)
    assert len(system.rows) == len(system.columns)
    boards = nominal(structure)
    quantity = quantities(structure, *(getattr(boards, n) for n in boards.__dataclass_fields__))
    voltages = np.concatenate([exact(structure, boards, GRID)[:, 0], np.ones((1, GRID.size))])
    for row in system.rows:
        total, size = np.zeros(GRID.size, dtype=complex), np.zeros(GRID.size)
        for (r, c), entry in system.entries.items():
            if r == row:
                assert all(0 <= m <= DEGREE for m, _, _ in entry)
                for (m, i, j), weight in entry.items():
                    term = weight * quantity[i, 0] * quantity[j, 0] * GRID**m * voltages[c]
                    total, size = total + term, size + np.abs(term)
        assert np.all(np.abs(total) <= 1e-12 * size + 1e-30)


@pytest.mark.parametrize("order", [2, 4, 6, 8])
@pytest.mark.parametrize("along_flow", [False, True])
def test_any_plan_for_the_output_of_a_board_is_accurate(order, along_flow):
    structure = structure_of(chain(order, op_amp(), source=50.0, load=1e4))
    system, boards = reduce(structure), nominal(structure)
    quantity = quantities(structure, *(getattr(boards, n) for n in boards.__dataclass_fields__))
    expected = exact(structure, boards, GRID)[structure.output]
    for seed in range(4):
        made = plan(system, (structure.output,), np.random.default_rng(seed), along_flow=along_flow)
        np.testing.assert_allclose(made.solve(quantity, GRID)[0], expected, rtol=1e-12)


def test_plans_along_the_flow_keep_every_net_of_a_long_loop():
    """Eight integrators, twelve op-amps, seven decades: all nets, and the transposed system."""
    structure = structure_of(chain(8, op_amp(), source=50.0, load=1e4))
    system, boards = reduce(structure), nominal(structure)
    quantity = quantities(structure, *(getattr(boards, n) for n in boards.__dataclass_fields__))
    for own, wanted, observed in (
        (system, system.columns, None),
        (system.transposed(structure.output), system.rows, structure.output),
    ):
        expected = exact(structure, boards, GRID, observed)[list(wanted)]
        made = plan(own, wanted, np.random.default_rng(0), along_flow=True)
        np.testing.assert_allclose(made.solve(quantity, GRID), expected, rtol=1e-11)


def test_boards_are_plans_for_most_circuits():
    """The speed rests on it: every board has a plan for its output and for its adjoint, and so
    have nearly all random circuits for their output."""
    for circuit in (chain(3, op_amp()), chain(6, op_amp(), source=10.0), tow_thomas(op_amp())):
        structure = structure_of(circuit)
        system = reduce(structure)
        assert choose_engine(structure, system, (structure.output,)).chosen is not None
        assert choose_engine(structure, system, system.columns).chosen is not None
        turned = system.transposed(structure.output)
        engine = choose_engine(structure, turned, system.rows, observed=structure.output)
        assert engine.chosen is not None
    generator = np.random.default_rng(41)
    made = [structure_of(random_circuit(generator)) for _ in range(20)]
    engines = [choose_engine(s, reduce(s), (s.output,)) for s in made]
    assert sum(e.chosen is not None for e in engines) >= 17


def test_values_far_from_nominal_are_solved_just_as_well():
    """Impedances and corners moved by decades, beyond what the plan was measured on."""
    circuit = chain(4, op_amp())
    structure = structure_of(circuit)
    engine = choose_engine(structure, reduce(structure), (structure.output,))
    boards = nominal(structure, 3)
    boards.values[1] *= 1e3
    boards.values[2, ::2] *= 1e-4
    found = engine.solve(boards, GRID)[0]
    np.testing.assert_allclose(found, exact(structure, boards, GRID)[structure.output], rtol=1e-9)


def test_a_plan_that_fails_outside_its_region_is_replaced_by_lapack():
    """The wrong plan on purpose, that of another circuit with the same parts: noticed by the
    check outside the trusted region."""
    right = structure_of(tow_thomas(op_amp()))
    wrong = structure_of(tow_thomas(op_amp(1e4, 10.0)))
    other = choose_engine(wrong, reduce(wrong), (wrong.output,))
    broken = plan(reduce(wrong), (0,), np.random.default_rng(0))
    assert other.chosen is not None
    engine = Engine(right, (right.output,), None, broken, 0.0, 1.0)
    boards = nominal(right, 2)
    assert not np.allclose(
        broken.solve(
            quantities(right, boards.values, boards.gain_bandwidth, boards.open_loop_gain), GRID
        )[0],
        exact(right, boards, GRID)[right.output],
    )
    np.testing.assert_allclose(
        engine.solve(boards, GRID)[0], exact(right, boards, GRID)[right.output], rtol=1e-10
    )


def test_a_response_that_vanishes_by_structure_is_exactly_zero():
    circuit = Circuit(
        passives=(
            resistor("R1", "in", "x", 1e3),
            capacitor("C1", "x", "0", 1e-9),
            resistor("R2", "out", "y", 1e3),
            resistor("R3", "y", "0", 1e3),
        ),
        amplifiers=(amplifier("U1", "0", "y", "out", op_amp()),),
    )
    f = np.geomspace(1, 1e6, 5)
    values = np.tile([p.value for p in circuit.passives], (400, 1))
    assert not compile_circuit(circuit).solve(f, values=values).any()


def test_pieces_of_a_batch_are_the_same_boards():
    """Chunks inside do not show: any subset of boards gives the same numbers."""
    program = compile_circuit(chain(5, op_amp()))
    f = np.geomspace(10, 1e5, 101)
    values = program.structure.values * np.random.default_rng(3).uniform(0.9, 1.1, (333, 1))
    whole = program.solve(f, values=values)
    for start, stop in ((0, 1), (17, 40), (300, 333)):
        np.testing.assert_allclose(
            program.solve(f, values=values[start:stop]), whole[start:stop], rtol=1e-13
        )
