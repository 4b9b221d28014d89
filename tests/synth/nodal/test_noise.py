"""Noise against published numbers and formulas."""

import math

import numpy as np
import pytest

from synth.circuit import Circuit
from synth.constants import BOLTZMANN
from synth.nodal import compile_circuit
from tests.synth.nodal.boards import (
    amplifier,
    capacitor,
    chain,
    integrator,
    op_amp,
    resistor,
)

QUIET = {"voltage_noise": 0.0, "current_noise": 0.0}


@pytest.mark.parametrize(("temperature", "density"), [(300.0, 4.0704e-9), (290.0, 4.0019e-9)])
def test_johnson_noise_of_a_kilohm(temperature, density):
    """Johnson 1928, Nyquist 1928 (from memory): sqrt(4 k T R), 4.0704 nV/rtHz at 300 K, 4.0019
    at 290 K (recomputed)."""
    circuit = Circuit(passives=(resistor("R1", "in", "out", 1e3),), amplifiers=())
    noise = compile_circuit(circuit).noise([1.0, 1e6], temperature=temperature)
    np.testing.assert_allclose(noise.density, density, rtol=2e-5)


def test_noise_of_an_rc_is_kt_over_c():
    """1 pF at 300 K: 64.358 uV rms (recomputed), whatever the resistance."""
    for resistance in (1e3, 1e5):
        circuit = Circuit(
            passives=(resistor("R1", "in", "out", resistance), capacitor("C1", "out", "0", 1e-12)),
            amplifiers=(),
        )
        corner = 1 / (2 * math.pi * resistance * 1e-12)
        f = np.concatenate([[0.0], np.geomspace(1e-4, 1e7, 20001) * corner])
        assert compile_circuit(circuit).noise(f, temperature=300.0).rms() == pytest.approx(
            64.358e-6, rel=2e-5
        )


@pytest.mark.parametrize(("temperature", "rms"), [(300.15, 2.87889e-6), (300.0, 2.87818e-6)])
def test_noise_of_a_leaky_integrator_is_2_kt_over_c(temperature, rms):
    """Inverting leaky integrator, equal R, noiseless amplifier, 1 nF: sqrt(2 k T / C)
    (recomputed); 300.15 K is the default of ngspice, and of ours."""
    circuit = integrator(op_amp(1e15, 1e12, **QUIET), leak=10e3, capacitance=1e-9)
    corner = 1 / (2 * math.pi * 10e3 * 1e-9)
    f = np.concatenate([[0.0], np.geomspace(1e-4, 1e5, 20001) * corner])
    program = compile_circuit(circuit)
    assert program.noise(f, temperature=temperature).rms() == pytest.approx(rms, rel=1e-5)
    if temperature == 300.15:
        assert program.noise(f).rms() == pytest.approx(rms, rel=1e-5)


def test_each_source_of_an_inverting_amplifier_has_its_textbook_gain():
    """Gain -9: R1 (Rf/R1)^2 4kTR1, Rf 4kTRf, en (1 + Rf/R1)^2, in at - Rf^2, in at + with
    a resistor Rp there (Rp (1 + Rf/R1))^2, whose own noise is 4kTRp (1 + Rf/R1)^2."""
    figures = op_amp(1e12, 1e12, voltage_noise=8e-9, current_noise=2e-12)
    r1, rf, rp = 1e3, 9e3, 700.0
    circuit = Circuit(
        passives=(
            resistor("R1", "in", "m", r1),
            resistor("R2", "m", "out", rf),
            resistor("R3", "p", "0", rp),
            resistor("RL", "out", "0", 50.0, bought=False),
        ),
        amplifiers=(amplifier("U1", "p", "m", "out", figures),),
    )
    noise = compile_circuit(circuit).noise([10.0], temperature=290.0)
    four_kt = 4 * BOLTZMANN * 290.0
    assert noise.refs == ("R1", "R2", "R3", "RL", "U1")
    np.testing.assert_allclose(
        noise.power[0, :3], [four_kt * r1 * 81, four_kt * rf, four_kt * rp * 100], rtol=1e-6
    )
    assert noise.power[0, 3] == pytest.approx(0.0, abs=1e-40)
    assert noise.amplifier_voltage[0, 0] == pytest.approx((8e-9 * 10) ** 2, rel=1e-6)
    assert noise.amplifier_current[0, 0] == pytest.approx(
        (2e-12 * rf) ** 2 + (2e-12 * rp * 10) ** 2, rel=1e-6
    )
    assert noise.total[0] == pytest.approx(noise.power.sum())


def test_load_of_a_passive_output_is_heard():
    """Behind a resistance the load adds its own noise: together 4kT(R1 || RL)."""
    circuit = Circuit(
        passives=(resistor("R1", "in", "out", 1e3), resistor("RL", "out", "0", 3e3, bought=False)),
        amplifiers=(),
    )
    noise = compile_circuit(circuit).noise([1.0], temperature=300.0)
    assert noise.total[0] == pytest.approx(4 * BOLTZMANN * 300 * 750.0, rel=1e-12)


def test_shares_add_up_to_one():
    noise = compile_circuit(chain(3, op_amp(), source=50.0)).noise(np.geomspace(10, 1e4, 40))
    shares = noise.shares()
    assert sum(shares.values()) == pytest.approx(1.0, rel=1e-12)
    assert shares["RIN"] > shares["RS"] > 0
