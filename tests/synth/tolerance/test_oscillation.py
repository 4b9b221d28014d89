"""Boards that are unstable by themselves, against the poles of every board."""

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.job import Accept, Loop
from synth.nodal import compile_circuit
from synth.population import Population
from synth.stability import poles_check, poles_on_the_right
from synth.tolerance import run_boards, run_loops
from synth.tolerance.drawing import BoardSource
from synth.tolerance.oscillation import OscillationWatch
from synth.transfer import Factor, TransferFunction
from tests.jobs import job_for

BAND = (10.0, 5e3)
W0 = 2 * np.pi * 1e5
FREQUENCY = np.geomspace(*BAND, 60)
POPULATION = Population(gain_bandwidth_spread=0.3)
LIMITS = Accept(magnitude_db=3.0, phase_deg=30.0)


def near_the_axis(gain_bandwidth, *, integrates=False):
    """A resonance beyond the band whose damping slow op-amps use up on some boards."""
    zeros = [Factor.real(-2e3)] if integrates else []
    poles = [Factor.pair(W0, 2.0), *([Factor.real(0)] if integrates else [])]
    gain = W0**2 * (5.0 if integrates else 1.0)
    target = TransferFunction.from_factors(gain, zeros, poles)
    figures = {"gain_bandwidth": gain_bandwidth}
    job = job_for(target, BAND, form="khn", op_amp_figures=figures, input_peak=1e-2)
    circuit = sketch_form(job, "khn", FREQUENCY).circuit
    return target, circuit.with_values({p.ref: p.ideal for p in circuit.passives})


def drawn_poles(circuit, boards):
    """So many boards and all their poles."""
    drawn = BoardSource(circuit, POPULATION, 1).draw(boards)
    program = compile_circuit(circuit)
    poles = program.poles(values=drawn.values, gain_bandwidth=drawn.gain_bandwidth)
    return program, drawn, poles


@pytest.mark.parametrize("integrates", [False, True])
@pytest.mark.parametrize("gain_bandwidth", [1e6, 2e6, 3e6, 10e6])
def test_the_watch_counts_the_boards_that_all_their_poles_say(gain_bandwidth, integrates):
    """No board is missed although few are solved: compared with the poles of every one."""
    target, circuit = near_the_axis(gain_bandwidth, integrates=integrates)
    program, drawn, poles = drawn_poles(circuit, 400)
    found = OscillationWatch(program, target).excess(drawn)
    np.testing.assert_array_equal(found, poles_on_the_right(poles, target))


def test_the_cases_hold_boards_of_both_kinds():
    """Otherwise the test above shows nothing."""
    shares = []
    for gain_bandwidth in (1e6, 2e6, 3e6, 10e6):
        target, circuit = near_the_axis(gain_bandwidth)
        shares.append(np.mean(poles_on_the_right(drawn_poles(circuit, 200)[2], target) > 0))
    assert shares[0] == 1
    assert shares[-1] == 0
    assert any(0.02 < s < 0.98 for s in shares), shares


def test_a_board_that_oscillates_does_not_pass_however_good_its_response():
    target, circuit = near_the_axis(2.5e6)
    program = compile_circuit(circuit)
    found = run_boards(
        program,
        circuit,
        program.solve(FREQUENCY),
        FREQUENCY,
        accept=LIMITS,
        boards=300,
        seed=1,
        population=POPULATION,
        wanted=target,
    )
    assert found.failures.boards == 0
    assert 0 < found.unstable < 300
    assert found.passed == 300 - found.unstable


def test_a_loop_counts_the_poles_its_board_brings():
    """Around a board far beyond the plant's crossover the loop neither adds nor removes any."""
    target, circuit = near_the_axis(2.5e6)
    program, _, poles = drawn_poles(circuit, 300)
    plant = TransferFunction.from_factors(1e4, [], [Factor.real(-10.0), Factor.real(-1e3)])
    found = run_loops(
        program,
        circuit,
        Loop(plant=plant),
        target,
        inverted=False,
        boards=300,
        seed=1,
        population=POPULATION,
    )
    assert found.stable == np.sum(poles_on_the_right(poles, target) == 0)
    assert 0 < found.stable < 300


def test_poles_on_the_axis_may_lie_on_either_side_of_it():
    """Finite gain moves a pole at the origin and a pair on the axis; poles that H(s) has on the
    right are wanted there."""
    pair = Factor.pair(100.0, np.inf)
    target = TransferFunction.from_factors(1, [], [pair, Factor.real(0), Factor.real(3.0)])
    poles = np.array([1e-3 + 0j, 0.1 + 100.1j, 0.1 - 100.1j, 3.01 + 0j, -1e6 + 0j, np.inf + 0j])
    assert poles_check(poles, target).passed
    check = poles_check(np.append(poles, [5e3 + 1e5j, 5e3 - 1e5j]), target)
    assert (check.value, check.limit, check.passed) == (3.0, 1.0, False)
    assert not poles_check(np.delete(poles, 3), target).passed


def test_poles_wanted_on_the_right_do_not_hide_others():
    """H(s) has a growing pair, and slow op-amps drive another pair over the axis on some boards:
    the wanted pair is always the one farthest to the right."""
    poles = [Factor.pair(1.7e3, -3.0), Factor.pair(W0, 2.0)]
    target = TransferFunction.from_factors(1.7e3**2 * W0**2, [], poles)
    figures = {"gain_bandwidth": 8e6}
    job = job_for(target, BAND, form="khn", op_amp_figures=figures, input_peak=1e-3)
    circuit = sketch_form(job, "khn", FREQUENCY).circuit
    circuit = circuit.with_values({p.ref: p.ideal for p in circuit.passives})
    program, drawn, found = drawn_poles(circuit, 400)
    expected = poles_on_the_right(found, target) - 2
    assert 0 < np.mean(expected > 0) < 1
    np.testing.assert_array_equal(OscillationWatch(program, target).excess(drawn), expected)
