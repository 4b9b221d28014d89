"""The compiled elimination: what it computes, and that its fallbacks are taken."""

import os
import subprocess
import sys

import numpy as np
import pytest

from synth.circuit import Circuit
from synth.nodal import compile_circuit, dense
from synth.nodal.engine import COMPILE_AFTER, Engine, choose_engine
from synth.nodal.plan import plan
from synth.nodal.reduction import DEGREE, quantities, reduce
from synth.nodal.region import Boards, Region
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
    engine = Engine(right, (right.output,), None, broken, Region(right, 0.0, 1.0), frozenset())
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


def test_the_same_circuit_gives_the_same_bytes_in_every_process():
    """Plans depend on no hash seed: results are reproducible to the last bit."""
    script = """
import hashlib
import numpy as np
from synth.nodal import compile_circuit
from tests.synth.nodal.boards import chain, op_amp
program = compile_circuit(chain(5, op_amp(), source=50.0))
values = program.structure.values * np.linspace(0.9, 1.1, 40)[:, None]
f = np.geomspace(10, 1e5, 60)
found = program.solve(f, values=values), program.solve(np.tile(f, 30), nets=["x1", "x2", "out"])
print(hashlib.sha256(b"".join(a.tobytes() for a in found)).hexdigest())
"""
    digests = {
        subprocess.run(
            [sys.executable, "-c", script],
            env={**os.environ, "PYTHONHASHSEED": seed},
            capture_output=True,
            text=True,
            check=True,
            timeout=60,
        ).stdout
        for seed in ("1", "2", "3")
    }
    assert len(digests) == 1


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


ODD = {
    "only fixtures": Circuit(
        passives=(resistor("R1", "in", "0", 1e3),), amplifiers=(), output_net="in"
    ),
    "a part across one net": Circuit(
        passives=(
            resistor("R1", "in", "out", 1e3),
            resistor("R2", "out", "out", 1e3),
            capacitor("C1", "out", "0", 1e-9),
            capacitor("C2", "out", "0", 2e-9),
        ),
        amplifiers=(),
    ),
    "a comparator without feedback": Circuit(
        passives=(resistor("R1", "out", "0", 1e3),),
        amplifiers=(amplifier("U1", "in", "0", "out", op_amp()),),
    ),
    "positive feedback": Circuit(
        passives=(resistor("R1", "in", "p", 1e3), resistor("R2", "p", "out", 5e3)),
        amplifiers=(amplifier("U1", "p", "0", "out", op_amp()),),
    ),
    "two op-amps on one summing net": Circuit(
        passives=(
            resistor("R1", "in", "m", 1e3),
            resistor("R2", "m", "y", 5e3),
            capacitor("C1", "m", "out", 1e-8),
        ),
        amplifiers=(
            amplifier("U1", "0", "m", "y", op_amp()),
            amplifier("U2", "y", "m", "out", op_amp(1e6, 1e4)),
        ),
    ),
    "inputs that follow each other": Circuit(
        passives=(
            resistor("R1", "in", "p", 1e3),
            resistor("R2", "p", "y", 2e3),
            resistor("R3", "q", "out", 3e3),
            capacitor("C1", "q", "0", 1e-9),
        ),
        amplifiers=(
            amplifier("U1", "q", "p", "y", op_amp()),
            amplifier("U2", "p", "q", "out", op_amp(1e6, 1e4)),
        ),
    ),
    "the output is a summing net": Circuit(
        passives=(resistor("R1", "in", "out", 1e3), resistor("R2", "out", "y", 2e3)),
        amplifiers=(amplifier("U1", "0", "out", "y", op_amp()),),
    ),
    "an op-amp that reads the source and another's output": Circuit(
        passives=(resistor("R1", "in", "m", 1e3), resistor("R2", "m", "y", 1e4)),
        amplifiers=(
            amplifier("U1", "0", "m", "y", op_amp()),
            amplifier("U2", "y", "in", "out", op_amp(1e6, 100.0)),
        ),
    ),
}


@pytest.mark.parametrize("name", list(ODD))
def test_odd_circuits_are_solved_like_any(name):
    """Compiled, by LAPACK and in extended precision; net by net where there is any."""
    circuit = ODD[name]
    program, structure = compile_circuit(circuit), structure_of(circuit)
    f = GRID.imag / (2 * np.pi)
    expected = exact(structure, nominal(structure), GRID)[:, 0].T if structure.size else None
    values = np.tile(structure.values, (COMPILE_AFTER // f.size + 1, 1))
    for nets in (None, list(program.nets)):
        alone = program.solve(f, nets=nets)
        np.testing.assert_allclose(
            program.solve(f, values=values, nets=nets)[0], alone, rtol=1e-9, atol=1e-25
        )
        if nets is None and structure.output < structure.size:
            np.testing.assert_allclose(alone, expected[:, structure.output], rtol=1e-10)
    if np.all(program.solve(f)):
        relative = program.sensitivities(f).passives
        assert np.all(np.isfinite(relative))
