"""The summing amplifier at both inputs: its gains, the classical relations, what it is not."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from netlist.deck import board_deck
from netlist.ngspice import Simulator
from synth.cells import CellInput, CellRules, Numbering, balance_of, difference_cell
from synth.choosing.pairs import Pair, with_pairs
from synth.circuit import Circuit
from synth.graph import INPUT
from synth.nodal import compile_circuit
from synth.parts import OpAmp
from synth.readback import graph_of
from tests.circuits import CAPACITORS, RESISTORS, figures, near_ideal

RF = 10e3


def amplifier_of(gains: list[float], op_amp: OpAmp, *, balanced: bool = True) -> Circuit:
    """All inputs from ``in``, those of positive gain at the non-inverting input."""
    inputs = [CellInput("in", RF / abs(g), f"input {k}", g > 0) for k, g in enumerate(gains)]
    built = difference_cell(
        Numbering(),
        block="y",
        output="out",
        inputs=inputs,
        balance=balance_of(inputs, RF) if balanced else None,
        feedback=RF,
        rules=CellRules(resistors=RESISTORS, capacitors=CAPACITORS, op_amp=op_amp),
        polarity=1,
    )
    return Circuit(passives=built.passives, amplifiers=(built.amplifier,), cells=(built.cell,))


GAINS = {
    "room at the other input": [-1.0, 0.3, 0.4],
    "crowded": [-0.5, 2.0, 1.5],
    "only the other input, small": [0.4],
    "only the other input, large": [3.0, 0.5],
    "many": [-0.7, -1.1, 0.2, 1.3, -0.01],
}


@pytest.mark.parametrize("gains", GAINS.values(), ids=GAINS)
def test_each_input_has_its_gain(gains: list[float]) -> None:
    """One input driven at a time, the others at ground, solved as a circuit."""
    circuit = amplifier_of(gains, near_ideal())
    refs = circuit.cells[0].inputs
    for ref, gain in zip(refs, gains, strict=True):
        alone = replace(
            circuit,
            passives=tuple(
                replace(p, nets=("0", p.nets[1])) if p.ref in refs and p.ref != ref else p
                for p in circuit.passives
            ),
            cells=(),
        )
        assert compile_circuit(alone).solve(10.0) == pytest.approx(gain, rel=1e-6), ref


@pytest.mark.parametrize("gains", GAINS.values(), ids=GAINS)
def test_it_reads_back_with_two_resistors_for_one_too(gains: list[float]) -> None:
    """The graph of the parts is the sum of the gains; of two in series or parallel as well."""
    circuit = amplifier_of(gains, near_ideal())
    first, last = circuit.cells[0].inputs[0], circuit.cells[0].inputs[-1]
    pairs = [Pair(ref=first, values=(3e3, 5e3), how="series")]
    if last != first:
        pairs.append(Pair(ref=last, values=(3e3, 5e3), how="parallel"))
    for each in (circuit, with_pairs(circuit, tuple(pairs))):
        (solved,) = compile_circuit(each).solve([10.0])
        assert graph_of(each).at(1j) == pytest.approx(solved, rel=1e-6)
    (block,) = graph_of(circuit).blocks
    assert [(t.source, t.weight) for t in block.terms] == [(INPUT, pytest.approx(sum(gains)))]


@pytest.mark.parametrize("gains", GAINS.values(), ids=GAINS)
def test_both_inputs_see_the_same_resistance_and_the_noise_gain_is_the_larger_sum(
    gains: list[float],
) -> None:
    """R_f over max(1 + N, P), and 1/A of the output is lost times that."""
    circuit = amplifier_of(gains, figures(open_loop_gain=1e6, gain_bandwidth=1e12))
    noise_gain = max(1 - sum(g for g in gains if g < 0), sum(g for g in gains if g > 0))
    for node in ("y_s", "y_p"):
        seen = 1 / sum(1 / p.value for p in circuit.passives if node in p.nets)
        assert seen == pytest.approx(RF / noise_gain, rel=1e-9)
    lost = 1 - compile_circuit(circuit).solve(1e-3) / sum(gains)
    assert lost == pytest.approx(noise_gain / 1e6, rel=1e-3)


def test_the_classical_summer_follows_without_a_balancing_resistor() -> None:
    """Kerwin, Huelsman and Newcomb at Q = 10: equal resistors at the inverting input, R2 from the
    input and R3 from the band-pass at the other, R3/R2 = 2 Q - 1 = 19, and a gain of
    2 - 1/Q = 1.9 (recomputed by nodal analysis)."""
    q = 10.0
    gain = 2 - 1 / q
    inputs = [
        CellInput("lp", RF, "low-pass"),
        CellInput("in", RF / gain, "input", at_plus=True),
        CellInput("bp", RF * q, "band-pass", at_plus=True),
    ]
    assert inputs[2].resistance / inputs[1].resistance == pytest.approx(19)
    assert balance_of(inputs, RF)[1] > 1e6 * RF
    circuit = amplifier_of([-1.0, gain, 1 / q], near_ideal(), balanced=False)
    assert circuit.cells[0].balance == ""
    assert graph_of(circuit).at(1j) == pytest.approx(-1 + gain + 1 / q)


def test_ngspice_agrees_on_response_and_noise() -> None:
    """A slow op-amp, every kind of term, both places of the balancing resistor."""
    with Simulator() as simulator:
        for gains in (GAINS["many"], GAINS["crowded"]):
            circuit = amplifier_of(gains, figures(gain_bandwidth=1e5))
            deck = board_deck(circuit, title="test", start_hz=1.0, stop_hz=1e6, points_per_decade=3)
            simulated = simulator.ac(deck, ["out"])
            f = simulated.frequency_hz
            program = compile_circuit(circuit)
            np.testing.assert_allclose(program.solve(f), simulated.voltages["out"], rtol=1e-6)
            spectrum = simulator.noise(deck, "out", 1.0, 1e6, 3)
            density = program.noise(spectrum.frequency_hz).density
            np.testing.assert_allclose(density, spectrum.density, rtol=1e-6)
