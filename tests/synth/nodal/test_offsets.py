"""DC errors against textbook numbers."""

import numpy as np
import pytest

from synth.circuit import Circuit
from synth.errors import NumericalError
from synth.nodal import compile_circuit
from tests.synth.nodal.boards import amplifier, capacitor, integrator, op_amp, resistor


def test_leaky_integrator_has_its_textbook_offset():
    """Sedra and Smith, Microelectronic Circuits: 10 k, 10 n, Rf 1 M, offset 2 mV, bias 100 nA,
    offset current 20 nA, balancing resistor 9.9 k: 0.222 V at the output."""
    circuit = Circuit(
        passives=(
            resistor("R1", "in", "m", 10e3),
            resistor("R2", "m", "out", 1e6),
            capacitor("C1", "m", "out", 10e-9),
            resistor("R3", "p", "0", 9.9e3),
        ),
        amplifiers=(
            amplifier("U1", "p", "m", "out", op_amp(1e7, 1e9, offset=2e-3, bias_current=100e-9)),
        ),
    )
    offsets = compile_circuit(circuit).dc_offsets()
    gain, plus, minus = (
        a[0, 0] for a in (offsets.voltage_gain, offsets.plus_gain, offsets.minus_gain)
    )
    assert gain == pytest.approx(101, rel=1e-6)
    assert minus == pytest.approx(1e6, rel=1e-6)
    assert plus == pytest.approx(-101 * 9.9e3, rel=1e-6)
    # Bias into + is 100 nA less half the offset current, into - 100 nA plus half of it.
    total = gain * 2e-3 + plus * 90e-9 + minus * 110e-9
    assert total == pytest.approx(0.222, abs=5e-4)
    # Equal currents balance but for 101 * 9.9 k - 1 M; of either sign they add.
    assert offsets.worst_equal_bias[0] == pytest.approx(0.202, rel=1e-3)
    assert offsets.worst[0] == pytest.approx(0.202 + 100e-9 * (1e6 + 101 * 9.9e3), rel=1e-5)


def test_offsets_of_each_op_amp_reach_each_output():
    """Two inverting stages of gain -2 and -5: column is the cause, row the output."""
    circuit = Circuit(
        passives=(
            resistor("R1", "in", "a_s", 1e3),
            resistor("R2", "a", "a_s", 2e3),
            resistor("R3", "a", "out_s", 1e3),
            resistor("R4", "out", "out_s", 5e3),
        ),
        amplifiers=(
            amplifier("U1", "0", "a_s", "a"),
            amplifier("U2", "0", "out_s", "out"),
        ),
    )
    offsets = compile_circuit(circuit).dc_offsets()
    assert offsets.nets == ("a", "out")
    np.testing.assert_allclose(offsets.voltage_gain, [[3, 0], [-15, 6]], rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(offsets.minus_gain, [[2e3, 0], [-10e3, 5e3]], rtol=1e-9, atol=1e-6)
    np.testing.assert_allclose(offsets.plus_gain, 0, atol=1e-9)


def test_a_bare_integrator_stands_at_its_open_loop_gain():
    offsets = compile_circuit(integrator(op_amp(1e6, 1e5, offset=1e-3))).dc_offsets()
    assert offsets.voltage_gain[0, 0] == pytest.approx(1e5, rel=1e-9)
    assert offsets.worst[0] > 100


def test_a_net_that_only_capacitors_hold_has_no_dc_level():
    circuit = Circuit(
        passives=(capacitor("C1", "in", "m", 1e-9), capacitor("C2", "m", "0", 1e-9)),
        amplifiers=(amplifier("U1", "m", "out", "out"),),
    )
    with pytest.raises(NumericalError, match="singular"):
        compile_circuit(circuit).dc_offsets()
