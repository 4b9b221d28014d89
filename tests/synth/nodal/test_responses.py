"""Responses of classic circuits against their published numbers and closed forms."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.circuit import Circuit
from synth.errors import CircuitError, NumericalError
from synth.nodal import compile_circuit
from tests.synth.nodal.boards import (
    IDEAL,
    amplifier,
    capacitor,
    chain,
    integrator,
    op_amp,
    random_circuit,
    resistor,
    tow_thomas,
)


def quadratic_low_pass(program, start_hz):
    """(corner [Hz], Q, gain at DC) of a second-order low-pass, from H at three frequencies:
    1/H = (1 + s/(w0 Q) + s^2/w0^2) / H0."""
    f = np.array([0.01, 1.0]) * start_hz
    low, mid = 1 / program.solve(f)
    gain = (mid.real - low.real) / (1 - 0.01**2)
    dc = low.real - gain * 0.01**2
    corner = start_hz / math.sqrt(-gain / dc)
    return corner, 1 / (mid.imag / dc * corner / start_hz), 1 / dc


def test_sallen_key_has_its_corner_and_q():
    """Sallen-Key 1955: w0^2 = 1/(R1 R2 C1 C2); 10 k, 10 k, 22 n, 11 n, unity gain: 1023.09 Hz,
    Q 0.70711 (recomputed from the formula)."""
    circuit = Circuit(
        passives=(
            resistor("R1", "in", "a", 10e3),
            resistor("R2", "a", "b", 10e3),
            capacitor("C1", "a", "out", 22e-9),
            capacitor("C2", "b", "0", 11e-9),
        ),
        amplifiers=(amplifier("U1", "b", "out", "out"),),
    )
    corner, q, gain = quadratic_low_pass(compile_circuit(circuit), 1000.0)
    assert corner == pytest.approx(1023.09, abs=0.005)
    assert q == pytest.approx(0.70711, abs=1e-5)
    assert gain == pytest.approx(1.0, rel=1e-6)


def test_multiple_feedback_has_its_corner_q_and_gain():
    """w0^2 = 1/(R2 R3 C1 C2), H0 = -R2/R1: 1259.33 Hz, Q 0.74605 (recomputed)."""
    circuit = Circuit(
        passives=(
            resistor("R1", "in", "a", 3.3e3),
            resistor("R2", "a", "out", 3.3e3),
            resistor("R3", "a", "b", 2.2e3),
            capacitor("C1", "a", "0", 100e-9),
            capacitor("C2", "b", "out", 22e-9),
        ),
        amplifiers=(amplifier("U1", "0", "b", "out"),),
    )
    corner, q, gain = quadratic_low_pass(compile_circuit(circuit), 1000.0)
    assert corner == pytest.approx(1259.33, abs=0.005)
    assert q == pytest.approx(0.74605, abs=1e-5)
    assert gain == pytest.approx(-1.0, rel=1e-6)


def kerwin_huelsman_newcomb(low, high, *, r=10e3, c=10e-9, r1=10e3, input_=10e3):
    """R2 = `low` from in, R3 = `high` from the band-pass, at the + input; R1s around the adder."""
    return Circuit(
        passives=(
            resistor("R1", "hp", "m", r1),
            resistor("R4", "out", "m", input_),
            resistor("R2", "in", "p", low),
            resistor("R3", "bp", "p", high),
            resistor("R5", "hp", "bp_s", r),
            capacitor("C1", "bp", "bp_s", c),
            resistor("R6", "bp", "out_s", r),
            capacitor("C2", "out", "out_s", c),
        ),
        amplifiers=(
            amplifier("U1", "p", "m", "hp"),
            amplifier("U2", "0", "bp_s", "bp"),
            amplifier("U3", "0", "out_s", "out"),
        ),
    )


def test_state_variable_loop_of_q_10():
    """Kerwin, Huelsman, Newcomb 1967 (from memory): w0 = 1/RC, R3/R2 = 2 Q - 1,
    K = 2 - 1/Q: Q = 10 needs R3/R2 = 19 and has gain 1.9."""
    program = compile_circuit(kerwin_huelsman_newcomb(1e3, 19e3))
    corner, q, gain = quadratic_low_pass(program, 1500.0)
    assert corner == pytest.approx(1 / (2 * math.pi * 10e3 * 10e-9), rel=1e-6)
    assert q == pytest.approx(10.0, rel=1e-5)
    assert gain == pytest.approx(1.9, rel=1e-6)


def test_state_variable_filter_of_the_mixed_signal_benchmarks():
    """State-variable filter of the ITC'97 mixed-signal benchmark set (Kaminska et al.), values
    from memory: R 10 k, C 20 n, 3 k and 7 k.  Recomputed: 795.775 Hz, Q 1.1111, gain -1."""
    circuit = Circuit(
        passives=(
            resistor("R1", "in", "m", 10e3),
            resistor("R2", "hp", "m", 10e3),
            resistor("R3", "out", "m", 10e3),
            resistor("R4", "p", "0", 3e3),
            resistor("R5", "bp", "p", 7e3),
            resistor("R6", "hp", "bp_s", 10e3),
            capacitor("C1", "bp", "bp_s", 20e-9),
            resistor("R7", "bp", "out_s", 10e3),
            capacitor("C2", "out", "out_s", 20e-9),
        ),
        amplifiers=(
            amplifier("U1", "p", "m", "hp"),
            amplifier("U2", "0", "bp_s", "bp"),
            amplifier("U3", "0", "out_s", "out"),
        ),
    )
    corner, q, gain = quadratic_low_pass(compile_circuit(circuit), 800.0)
    assert corner == pytest.approx(795.775, abs=0.005)
    assert q == pytest.approx(1.1111, abs=1e-4)
    assert gain == pytest.approx(-1.0, rel=1e-6)


def test_tow_thomas_has_its_corner():
    """Tow 1968, Thomas 1971 (from memory): 10 k and 1.59 n give 10.0097 kHz (recomputed)."""
    corner, q, _ = quadratic_low_pass(compile_circuit(tow_thomas()), 10e3)
    assert corner == pytest.approx(10009.7, abs=0.1)
    assert q == pytest.approx(1.0, rel=1e-6)


@pytest.mark.parametrize("capacitance", [1e-9, 47e-9])
def test_integrator_with_an_integrating_op_amp_obeys_the_closed_form(capacitance):
    """A(s) = wt/s: H = -(1/sRC) / (1 + 1/(wt R C) + s/wt), by algebra."""
    gain_bandwidth = 1e6
    program = compile_circuit(
        integrator(op_amp(gain_bandwidth, 1e14), capacitance=capacitance, resistance=10e3)
    )
    f = np.logspace(1, 7, 25)
    s, wt, rc = 2j * np.pi * f, 2 * np.pi * gain_bandwidth, 10e3 * capacitance
    expected = -1 / (s * rc) / (1 + 1 / (wt * rc) + s / wt)
    np.testing.assert_allclose(program.solve(f), expected, rtol=1e-9)


def test_finite_gain_makes_a_bare_integrator_regular_at_dc():
    """H(0) = -A0: the capacitor is open."""
    assert compile_circuit(integrator(op_amp(1e6, 1e5))).solve(0.0)[0] == pytest.approx(-1e5)


def test_two_integrator_loop_loses_damping_with_finite_bandwidth():
    """Tow-Thomas with one-pole op-amps: w0 falls by about 1.5 f0/GBW, Q rises to
    Q/(1 - 4 Q f0/GBW) (first order, recomputed)."""
    f0 = 1 / (2 * math.pi * 10e3 * 1.59e-9)
    f = np.linspace(0.9, 1.1, 20001) * f0
    e = 1e-3
    program = compile_circuit(tow_thomas(op_amp(f0 / e, 1e9), damping=10 * 10e3))
    peak = np.abs(program.solve(f))
    assert f[peak.argmax()] / f0 - 1 == pytest.approx(-1.5 * e - 1 / 433, abs=0.2 * e)
    assert peak.max() == pytest.approx(10 / (1 - 40 * e), rel=0.01)


def test_axes_are_boards_frequencies_nets():
    program = compile_circuit(chain(3, op_amp()))
    f = np.logspace(1, 5, 7)
    boards = np.tile(program.structure.values, (4, 1))
    boards[2] *= 1.1
    assert program.solve(f).shape == (7,)
    assert program.solve(f, nets=["in", "out", "0"]).shape == (7, 3)
    assert program.solve(f, values=boards).shape == (4, 7)
    assert program.solve(f, gain_bandwidth=np.full((5, len(program.amplifiers)), 1e6)).shape == (
        5,
        7,
    )
    many = program.solve(f, values=boards, nets=["x1", "in", "0"])
    assert many.shape == (4, 7, 3)
    np.testing.assert_array_equal(many[:, :, 1], 1.0)
    np.testing.assert_array_equal(many[:, :, 2], 0.0)
    np.testing.assert_allclose(
        many[2, :, 0], program.solve(f, values=boards[2], nets=["x1"])[:, 0], rtol=1e-12
    )
    assert np.abs(many[2, :, 0] / many[1, :, 0] - 1).max() > 0.01


def test_op_amp_figures_belong_to_their_op_amps():
    """A slow first op-amp is not the same as a slow second one."""
    circuit = Circuit(
        passives=(
            resistor("R1", "in", "a_s", 1e3),
            resistor("R2", "a", "a_s", 1e3),
            resistor("R3", "a", "out_s", 1e3),
            resistor("R4", "out", "out_s", 9e3),
        ),
        amplifiers=(amplifier("U1", "0", "a_s", "a"), amplifier("U2", "0", "out_s", "out")),
    )
    program = compile_circuit(circuit)
    slow_first, slow_second = program.solve(1e5, gain_bandwidth=[[1e6, 1e12], [1e12, 1e6]])[:, 0]
    assert slow_first == pytest.approx(9 / (1 + 2j * 0.1), rel=1e-5)
    assert slow_second == pytest.approx(9 / (1 + 10j * 0.1), rel=1e-5)


def test_source_resistance_and_load_are_part_of_the_circuit():
    circuit = Circuit(
        passives=(
            resistor("RS", "in", "src", 1e3, bought=False),
            resistor("R1", "src", "out", 1e3),
            resistor("RL", "out", "0", 2e3, bought=False),
        ),
        amplifiers=(),
    )
    np.testing.assert_allclose(compile_circuit(circuit).solve([0.0, 1e9]), 0.5, rtol=1e-14)


def test_a_floating_net_is_refused_by_name():
    circuit = Circuit(
        passives=(
            resistor("R1", "in", "out", 1e3),
            resistor("R2", "lost", "gone", 1e3),
            capacitor("C2", "lost", "gone", 1e-9),
        ),
        amplifiers=(),
    )
    with pytest.raises(CircuitError, match=r"net 'lost' floats: got only R2, C2 on it, expected"):
        compile_circuit(circuit)


def test_an_input_pin_without_a_passive_is_refused_by_name():
    circuit = Circuit(
        passives=(resistor("R1", "in", "out", 1e3),),
        amplifiers=(
            amplifier("U1", "z", "m", "out", IDEAL),
            amplifier("U2", "out", "m", "y", IDEAL),
            amplifier("U3", "y", "0", "z", IDEAL),
        ),
    )
    with pytest.raises(CircuitError, match="net 'm' floats"):
        compile_circuit(circuit)


def test_nonsense_is_refused_in_one_line():
    program = compile_circuit(tow_thomas())
    with pytest.raises(CircuitError, match=r"got values of shape \(3,\), expected \(8,\)"):
        program.solve(1.0, values=[1.0, 2.0, 3.0])
    with pytest.raises(CircuitError, match="not all positive and finite"):
        program.solve(1.0, values=np.zeros(8))
    with pytest.raises(CircuitError, match="got the net 'nowhere', expected one of"):
        program.solve(1.0, nets=["nowhere"])
    with pytest.raises(CircuitError, match="got frequencies"):
        program.solve([1.0, math.nan])
    with pytest.raises(CircuitError, match="got frequencies"):
        program.solve(-1.0)
    with pytest.raises(CircuitError, match=r"\[2, 3\] boards"):
        program.solve(
            1.0,
            values=np.tile(program.structure.values, (2, 1)),
            gain_bandwidth=np.full((3, 3), 1e6),
        )


def test_a_net_only_capacitors_hold_has_no_dc_level():
    circuit = Circuit(
        passives=(capacitor("C1", "in", "out", 1e-9), capacitor("C2", "out", "0", 1e-9)),
        amplifiers=(),
    )
    program = compile_circuit(circuit)
    assert program.solve(1e3)[0] == pytest.approx(0.5)
    with pytest.raises(NumericalError, match="singular"):
        program.solve(0.0)


@settings(deadline=None, derandomize=True, max_examples=25)
@given(seed=st.integers(0, 10**6), factor=st.floats(1e-3, 1e3))
def test_scaling_impedances_leaves_the_response(seed, factor):
    """R times k and C over k: no op-amp of ours loads anything, so H stays."""
    program = compile_circuit(random_circuit(np.random.default_rng(seed), most_amplifiers=5))
    structure, f = program.structure, np.geomspace(1.0, 1e6, 7)
    scaled = np.where(structure.is_resistor, structure.values * factor, structure.values / factor)
    np.testing.assert_allclose(
        program.solve(f, values=scaled), program.solve(f), rtol=1e-8, atol=1e-20
    )


@settings(deadline=None, derandomize=True, max_examples=25)
@given(seed=st.integers(0, 10**6), factor=st.floats(1e-3, 1e3))
def test_scaling_frequencies_moves_the_response(seed, factor):
    """C over k and GBW times k: H(k f) becomes what H(f) was."""
    program = compile_circuit(random_circuit(np.random.default_rng(seed), most_amplifiers=5))
    structure, f = program.structure, np.geomspace(1.0, 1e6, 7)
    scaled = np.where(structure.is_resistor, structure.values, structure.values / factor)
    np.testing.assert_allclose(
        program.solve(f * factor, values=scaled, gain_bandwidth=structure.gain_bandwidth * factor),
        program.solve(f),
        rtol=1e-8,
        atol=1e-20,
    )
