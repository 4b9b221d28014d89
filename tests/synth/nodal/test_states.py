"""Poles and state space of boards, against the matrix pencil, the responses and ngspice."""

import numpy as np
import pytest
import scipy.linalg
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from synth.circuit import Circuit
from synth.errors import NumericalError
from synth.nodal import compile_circuit, dense
from tests.synth.nodal.boards import (
    amplifier,
    capacitor,
    chain,
    integrator,
    op_amp,
    random_circuit,
    resistor,
    tow_thomas,
)

SEEDS = st.integers(0, 2**32 - 1)


def pencil_poles(program):
    """Finite generalised eigenvalues of M0 + s M1, the matrices read off at two frequencies."""
    structure, w = program.structure, 1e5
    values = np.tile(structure.values, (2, 1))
    s = np.array([0, w], dtype=complex)
    y = dense.admittances(structure, s, values)
    a = dense.inverse_gains(s, structure.gain_bandwidth, structure.open_loop_gain)
    at_0, at_w = dense.equations(structure, y, a)[:, :, : structure.size].real
    rows = np.max(np.abs(at_w), axis=1)[:, None]
    found = scipy.linalg.eigvals(at_0 / rows, -(at_w - at_0) / rows)
    return found[np.isfinite(found)] * w


def nearest(poles, others):
    """Distance of every pole to the nearest of the others, as a share of its size."""
    return np.min(np.abs(poles[:, None] - others[None, :]), axis=1) / np.abs(poles)


@settings(deadline=None, derandomize=True, max_examples=40)
@given(SEEDS)
def test_poles_are_the_eigenvalues_of_the_pencil(seed):
    """Those the pencil gets right: not many decades below the largest, and not its infinite ones,
    which come out merely large."""
    program = compile_circuit(random_circuit(np.random.default_rng(seed), most_amplifiers=5))
    poles = program.poles()
    poles = poles[np.isfinite(poles)]
    expected = pencil_poles(program)
    largest = np.max(np.abs(poles))
    for some, others in ((expected, poles), (poles, expected)):
        sure = (np.abs(some) < 10 * largest) & (np.abs(some) > 1e-8 * largest)
        assert np.max(nearest(some[sure], others), initial=0) < 1e-3


def test_poles_of_an_integrator_and_of_a_follower():
    """Integrator of gain A0 and GBW: slow pole near -1/(RC A0 + A0/(2 pi GBW)), fast one near
    -2 pi GBW; follower: one pole at -2 pi GBW (1 + 1/A0)."""
    figures = op_amp(1e6, 1e5)
    slow, fast = np.sort(compile_circuit(integrator(figures)).poles().real)[::-1]
    assert slow == pytest.approx(-1 / (10e3 * 10e-9 * 1e5 + 1e5 / (2 * np.pi * 1e6)), rel=2e-5)
    assert fast == pytest.approx(-2 * np.pi * 1e6, rel=3e-3)
    follower = Circuit(
        passives=(resistor("R1", "in", "p", 1e3), resistor("R2", "p", "0", 1e9)),
        amplifiers=(amplifier("U1", "p", "out", "out", op_amp(1e6, 99.0)),),
    )
    (pole,) = compile_circuit(follower).poles()
    assert pole == pytest.approx(-2 * np.pi * 1e6 * (1 + 1 / 99), rel=1e-9)


def test_boards_are_solved_one_by_one_whatever_their_number():
    program = compile_circuit(tow_thomas(op_amp()))
    rng = np.random.default_rng(1)
    values = program.structure.values * rng.uniform(0.8, 1.2, (7, program.structure.values.size))
    gbw = rng.uniform(1e6, 9e6, (7, len(program.amplifiers)))
    together = program.poles(values=values, gain_bandwidth=gbw)
    for k in range(7):
        alone = program.poles(values=values[k], gain_bandwidth=gbw[k])
        assert np.max(nearest(alone, together[k])) < 1e-9


@settings(deadline=None, derandomize=True, max_examples=25)
@given(st.sampled_from([2, 3, 6]), SEEDS)
def test_slopes_of_poles_are_finite_differences(order, seed):
    program = compile_circuit(chain(order, op_amp(), source=200.0, load=2e3))
    rng = np.random.default_rng(seed)
    poles, slopes = program.pole_slopes()
    structure, step = program.structure, 1e-5
    column = int(rng.integers(slopes.shape[1]))
    nominal = np.concatenate([structure.values, structure.gain_bandwidth])
    moved = []
    for sign in (1, -1):
        changed = nominal.copy()
        changed[column] *= np.exp(sign * step)
        count = structure.values.size
        moved.append(program.poles(values=changed[:count], gain_bandwidth=changed[count:]))
    apart = np.array([np.sort(np.abs(poles - p))[1] / abs(p) for p in poles])
    for p, slope in zip(poles[apart > 0.01], slopes[apart > 0.01, column], strict=True):
        up, down = (m[np.argmin(np.abs(m - p))] for m in moved)
        assert abs((up - down) / (2 * step) - slope) < 1e-4 * abs(p)


@settings(deadline=None, derandomize=True, max_examples=25)
@given(SEEDS)
def test_the_state_space_has_the_response_of_the_nodal_equations(seed):
    rng = np.random.default_rng(seed)
    circuit = random_circuit(rng, most_amplifiers=5)
    program = compile_circuit(circuit)
    nets = [a.output for a in circuit.amplifiers]
    size = np.abs(program.poles())
    assume(np.all(np.isfinite(size)) and np.max(size) < 1e9 * np.min(size))
    system = program.state_space(nets)
    frequency = rng.uniform(10, 1e5, 5)
    wanted = program.solve(frequency, nets=nets)
    s = 2j * np.pi * frequency
    solved = [np.linalg.solve(p * np.eye(system.order) - system.A, system.B) for p in s]
    found = np.array([system.C @ x + system.D for x in solved])
    assert np.max(np.abs(found - wanted)) < 1e-5 * max(float(np.max(np.abs(wanted))), 1.0)


def test_a_loop_of_capacitors_has_no_state_space():
    circuit = Circuit(
        passives=(
            resistor("R1", "in", "s", 1e4),
            capacitor("C1", "out", "s", 1e-8),
            capacitor("C2", "out", "s", 1e-8),
        ),
        amplifiers=(amplifier("U1", "0", "s", "out", op_amp()),),
    )
    program = compile_circuit(circuit)
    assert np.sum(np.isfinite(program.poles())) == 2
    with pytest.raises(NumericalError, match="loop of capacitors"):
        program.state_space(["out"])
