"""Sensitivities against finite differences, closed forms and the sums scaling demands."""

import math

import numpy as np
import pytest

from synth.circuit import Circuit
from synth.errors import NumericalError
from synth.nodal import compile_circuit
from synth.nodal.engine import COMPILE_AFTER
from tests.synth.nodal.boards import (
    IDEAL,
    amplifier,
    chain,
    integrator,
    op_amp,
    random_circuit,
    resistor,
    tow_thomas,
)

GRID = np.geomspace(3.0, 3e6, 13)


def differences(program, nominal, solve, step=1e-5):
    """Central differences of ln H in ln of each column, error of order step^2."""
    columns = []
    for k in range(len(nominal)):
        up, down = np.array(nominal), np.array(nominal)
        up[k] *= math.exp(step)
        down[k] *= math.exp(-step)
        columns.append(np.log(solve(program, up) / solve(program, down)) / (2 * step))
    return np.array(columns).T


def check_against_differences(program, frequency_hz):
    circuit = program.circuit
    found = program.sensitivities(frequency_hz)
    scale = 1 + np.abs(found.passives).max()
    by_value = differences(
        program,
        [p.value for p in circuit.passives],
        lambda p, v: p.solve(frequency_hz, values=v),
    )
    by_gbw = differences(
        program,
        [a.figures.gain_bandwidth for a in circuit.amplifiers],
        lambda p, v: p.solve(frequency_hz, gain_bandwidth=v),
    )
    by_gain = differences(
        program,
        [a.figures.open_loop_gain for a in circuit.amplifiers],
        lambda p, v: p.solve(frequency_hz, open_loop_gain=v),
    )
    np.testing.assert_allclose(found.response, program.solve(frequency_hz), rtol=1e-8)
    for got, expected in (
        (found.passives, by_value),
        (found.gain_bandwidth, by_gbw),
        (found.open_loop_gain, by_gain),
    ):
        np.testing.assert_allclose(got, expected, rtol=1e-5, atol=2e-8 * scale**3)


@pytest.mark.parametrize("order", [2, 3, 6])
def test_sensitivities_of_boards_equal_finite_differences(order):
    program = compile_circuit(chain(order, op_amp(), source=200.0, load=2e3))
    check_against_differences(program, np.geomspace(10.0, 1e5, 13))


@pytest.mark.parametrize("seed", range(8))
def test_sensitivities_of_random_circuits_equal_finite_differences(seed):
    generator = np.random.default_rng([30, seed])
    program = compile_circuit(random_circuit(generator, most_amplifiers=4))
    while not np.all(program.solve(GRID)):
        program = compile_circuit(random_circuit(generator, most_amplifiers=4))
    check_against_differences(program, GRID)


@pytest.mark.parametrize("seed", range(6))
def test_compiled_and_lapack_sensitivities_are_the_same(seed):
    """The first call is solved by LAPACK, a long one through plans."""
    generator = np.random.default_rng([31, seed])
    circuit = random_circuit(generator)
    while not np.all(compile_circuit(circuit).solve(GRID)):
        circuit = random_circuit(generator)
    program = compile_circuit(circuit)
    first = program.sensitivities(GRID)
    long = program.sensitivities(np.tile(GRID, COMPILE_AFTER // GRID.size + 1))
    for name in ("passives", "gain_bandwidth", "open_loop_gain"):
        a, b = getattr(first, name), getattr(long, name)[: GRID.size]
        np.testing.assert_allclose(a, b, rtol=1e-6, atol=1e-8 * (1 + np.abs(a).max()))


def test_integrator_follows_its_closed_form():
    """H = -1/(sRC): -1 for R and for C; one-pole op-amps change it by f/GBW only."""
    found = compile_circuit(integrator(op_amp(1e13, 1e12))).sensitivities([10.0, 1e3])
    np.testing.assert_allclose(found.passives, -1.0, rtol=1e-6)
    np.testing.assert_allclose(found.gain_bandwidth, 0.0, atol=1e-8)


def test_gain_figures_have_the_sign_of_their_effect():
    """Follower of gain A/(1 + A): d ln H/d ln A = 1/(1 + A), at DC all of it from A0."""
    circuit = Circuit(
        passives=(resistor("R1", "in", "p", 1e3), resistor("R2", "p", "0", 1e9)),
        amplifiers=(amplifier("U1", "p", "out", "out", op_amp(1e6, 99.0)),),
    )
    found = compile_circuit(circuit).sensitivities([0.0])
    assert found.open_loop_gain[0, 0] == pytest.approx(0.01)
    assert found.gain_bandwidth[0, 0] == 0.0


@pytest.mark.parametrize("net", ["a", "a_s", "out"])
def test_any_net_can_be_observed(net):
    program = compile_circuit(tow_thomas(op_amp(1e6, 1e4)))
    found = program.sensitivities(GRID, net=net)
    values = [p.value for p in program.circuit.passives]
    expected = differences(program, values, lambda p, v: p.solve(GRID, values=v, nets=[net])[:, 0])
    np.testing.assert_allclose(found.passives, expected, rtol=1e-5, atol=1e-7)


def sensitivities_of_w0_and_q(found, f, w0, q):
    """S of (H0, w0, Q), shape (3, parts), from those of H = H0/(1 + s/(w0 Q) + s^2/w0^2)."""
    s = 2j * np.pi * f
    first, second = s / (w0 * q), (s / w0) ** 2
    d = 1 + first + second
    design = np.stack([np.ones_like(s), (first + 2 * second) / d, first / d], axis=1)
    stacked = np.concatenate([design.real, design.imag])
    right = np.concatenate([found.passives.real, found.passives.imag])
    return np.linalg.lstsq(stacked, right, rcond=None)[0]


def test_sensitivity_sums_of_an_active_rc_circuit():
    """Any active RC circuit with ideal op-amps: over all R, and over all C, the sensitivities of
    w0 add up to -1 and those of Q to 0 (impedance and frequency scaling; Moschytz, from memory)."""
    circuit = tow_thomas(damping=7e3)
    w0, q = 1 / (10e3 * 1.59e-9), 0.7
    f = np.geomspace(0.1, 10, 9) * w0 / (2 * np.pi)
    found = compile_circuit(circuit).sensitivities(f)
    _, of_w0, of_q = sensitivities_of_w0_and_q(found, f, w0, q)
    is_resistor = np.array([p.kind == "resistor" for p in circuit.passives])
    for sensitivity, total in ((of_w0, -1.0), (of_q, 0.0)):
        assert sensitivity[is_resistor].sum() == pytest.approx(total, abs=1e-5)
        assert sensitivity[~is_resistor].sum() == pytest.approx(total, abs=1e-5)
    # w0^2 = (R6/R5) / (R3 R4 C1 C2), Q = R2 C1 w0: Tow 1968, Thomas 1971 (from memory).
    by_ref = dict(zip(found.refs, of_w0, strict=True))
    expected = {"R1": 0, "R2": 0, "R3": -0.5, "R4": -0.5, "R5": -0.5, "R6": 0.5, "C1": -0.5}
    for ref, value in expected.items():
        assert by_ref[ref] == pytest.approx(value, abs=1e-5)
    assert dict(zip(found.refs, of_q, strict=True))["R2"] == pytest.approx(1.0, abs=1e-5)


def test_a_dead_response_has_no_relative_sensitivity():
    circuit = Circuit(
        passives=(resistor("R1", "in", "0", 1e3), resistor("R2", "out", "0", 1e3)),
        amplifiers=(amplifier("U1", "0", "0", "out", IDEAL),),
    )
    with pytest.raises(NumericalError, match=r"net 'out' has no response at 5 Hz"):
        compile_circuit(circuit).sensitivities([5.0])
