"""The second opinion: ngspice on the same circuits, random ones of every topology.

ngspice needs a DC level at every net, which the random circuits provide.  Its own rounding shows
at nets whose voltage is far below others in the circuit (the engine's extended-precision reference
sides with the engine there), hence the absolute tolerance on inner nets; at the output none is
needed.
"""

import numpy as np
import pytest

from netlist.deck import board_deck
from netlist.ngspice import Simulator
from synth.nodal import compile_circuit
from synth.nodal.engine import COMPILE_AFTER
from tests.synth.forms.biquads import low_pass, unscaled
from tests.synth.nodal.boards import chain, op_amp, random_circuit, tow_thomas

START, STOP, DENSITY = 1.0, 1e7, 3


@pytest.fixture(scope="module")
def simulator():
    with Simulator() as one:
        yield one


def deck_of(circuit):
    return board_deck(
        circuit, title="test", start_hz=START, stop_hz=STOP, points_per_decade=DENSITY
    )


def compiled_response(program, frequency_hz):
    """The nominal response through the compiled plan, not LAPACK: as one of many boards."""
    boards = COMPILE_AFTER // frequency_hz.size + 1
    values = np.tile([p.value for p in program.circuit.passives], (boards, 1))
    response = program.solve(frequency_hz, values=values)
    np.testing.assert_allclose(
        response, np.broadcast_to(response[0], response.shape), rtol=1e-12, atol=0
    )
    return response[-1]


@pytest.mark.parametrize("batch", range(4))
def test_output_of_random_circuits_agrees_to_one_in_a_million(simulator, batch):
    """50 circuits a batch, 1 to 9 op-amps, compiled plan and LAPACK both."""
    generator = np.random.default_rng([20, batch])
    for number in range(50):
        circuit = random_circuit(generator)
        simulated = simulator.ac(deck_of(circuit), ["out"])
        f, expected = simulated.frequency_hz, simulated.voltages["out"]
        program = compile_circuit(circuit)
        for found in (program.solve(f), compiled_response(program, f)):
            np.testing.assert_allclose(
                found, expected, rtol=1e-6, atol=1e-20, err_msg=f"batch {batch}, {number}"
            )


def test_every_op_amp_output_of_random_circuits_agrees(simulator):
    generator = np.random.default_rng(21)
    for number in range(30):
        circuit = random_circuit(generator)
        nets = list(circuit.signal_nets())
        simulated = simulator.ac(deck_of(circuit), nets)
        f = simulated.frequency_hz
        program = compile_circuit(circuit)
        long = np.tile(f, COMPILE_AFTER // f.size + 1)
        for found in (
            program.solve(f, nets=nets),
            program.solve(long, nets=nets)[: f.size],
            program.sensitivities(f).voltages if np.all(program.solve(f)) else None,
        ):
            if found is None:
                continue
            for k, net in enumerate(nets):
                expected = simulated.voltages[net]
                np.testing.assert_allclose(
                    found[:, k],
                    expected,
                    rtol=1e-6,
                    atol=1e-20 + 1e-10 * np.abs(expected).max(),
                    err_msg=f"circuit {number}, net {net}",
                )


def test_boards_with_other_values_agree(simulator):
    """Values changed in ngspice by reference are the columns of `values`."""
    circuit = chain(4, op_amp(), source=100.0, load=5e3)
    program = compile_circuit(circuit)
    nominal = np.array([p.value for p in circuit.passives])
    values = nominal * np.random.default_rng(2).uniform(0.9, 1.1, (5, nominal.size))
    deck = deck_of(circuit)
    f = simulator.ac(deck, ["out"]).frequency_hz
    changes = [dict(zip(program.refs, board, strict=True)) for board in values]
    np.testing.assert_allclose(
        program.solve(f, values=values), simulator.alter_ac(deck, changes, "out"), rtol=1e-6
    )


@pytest.mark.parametrize("seed", range(12))
def test_noise_of_random_circuits_agrees(simulator, seed):
    """Thermal noise of all resistors, op-amp voltage at +, current at both inputs."""
    circuit = random_circuit(np.random.default_rng([22, seed]))
    spectrum = simulator.noise(deck_of(circuit), "out", START, STOP, DENSITY)
    noise = compile_circuit(circuit).noise(spectrum.frequency_hz)
    np.testing.assert_allclose(noise.density, spectrum.density, rtol=1e-6)


@pytest.mark.parametrize(
    "circuit",
    [
        tow_thomas(op_amp()),
        chain(6, op_amp(), source=50.0),
        unscaled(low_pass(5.0), "khn", gain_bandwidth=1e6),
    ],
    ids=["two integrators", "chain", "both inputs of an op-amp"],
)
def test_noise_of_boards_agrees(simulator, circuit):
    spectrum = simulator.noise(deck_of(circuit), "out", START, STOP, DENSITY)
    noise = compile_circuit(circuit).noise(spectrum.frequency_hz)
    np.testing.assert_allclose(noise.density, spectrum.density, rtol=1e-6)
