"""The circuit's parts ask for the graph they were made from, source resistance included."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from synth.candidates import sketch_form
from synth.errors import RealizationError
from synth.forms import FORMS
from synth.graph import Block, BlockGraph, Term
from synth.job import Job
from synth.mapping import Sizing, map_graph
from synth.nodal import compile_circuit
from synth.polarity import choose_polarity
from synth.readback import graph_of
from synth.transfer import TransferFunction
from tests.forms import exists, sizes_of_response
from tests.jobs import job_for
from tests.strategies import butterworth, targets

FREQUENCY = np.geomspace(10, 1e4, 40)


def ideal_job(target: TransferFunction, **signal: object) -> Job:
    """A job whose op-amps are as good as ideal and whose parts may be anything."""
    from dataclasses import replace

    from tests.jobs import capacitor_rule, resistor_rule

    return job_for(
        target,
        (10.0, 1e4),
        resistors=replace(resistor_rule(), smallest=1.0, largest=1e9),
        capacitors=replace(capacitor_rule(), smallest=1e-13, largest=1e-3),
        op_amp_figures={
            "gain_bandwidth": 1e13,
            "open_loop_gain": 1e12,
            "slew_rate": 1e12,
            "output_current": 1e3,
        },
        input_peak=1e-3,
        **signal,
    )


@settings(deadline=None, derandomize=True, max_examples=25)
@given(targets(orders=(1, 6)), st.sampled_from(sorted(FORMS)), st.sampled_from(["no", "either"]))
def test_parts_read_back_as_the_target(target: TransferFunction, form: str, inverted: str) -> None:
    """The graph read off the values, signs included, is H(s) (or -H(s) where allowed)."""
    from dataclasses import replace

    assume(exists(form, target))
    job = ideal_job(target)
    job = replace(job, board=replace(job.board, inverted=inverted))
    sketch = sketch_form(job, form, FREQUENCY)
    wanted = target.response(FREQUENCY) * (-1 if sketch.polarity.output_inverted else 1)
    s = 2j * np.pi * FREQUENCY
    error = np.abs(graph_of(sketch.circuit).at(s) - wanted)
    assert np.max(error / sizes_of_response(sketch.graph, wanted, s)) < 1e-8


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("source_resistance", [0.0, 600.0])
def test_nodal_response_is_the_target_with_ideal_op_amps(
    form: str, source_resistance: float
) -> None:
    """The source resistance is made up for by the input resistors, the load changes nothing."""
    target = butterworth(3, 1e3)
    job = ideal_job(target, source_resistance=source_resistance, load=2e3)
    sketch = sketch_form(job, form, FREQUENCY)
    response = compile_circuit(sketch.circuit).solve(FREQUENCY)
    np.testing.assert_allclose(response, target.response(FREQUENCY), rtol=1e-6)
    s = 2j * np.pi * FREQUENCY
    np.testing.assert_allclose(
        graph_of(sketch.circuit).at(s), target.response(FREQUENCY), rtol=1e-8
    )


def test_a_source_too_weak_for_the_board_is_refused() -> None:
    """The message gives both resistances."""
    job = job_for(butterworth(2, 1e3), (100, 2e3), source_resistance=1e7)
    with pytest.raises(RealizationError, match=r"signal.source_resistance: got 10 Mohm"):
        sketch_form(job, "cascade", FREQUENCY)


def test_a_cell_at_both_inputs_cannot_share_a_weak_source() -> None:
    """Alone behind the source it is made up for; beside another resistor the board would not be
    H(s), whatever the values."""
    x = Block("x1", "integrator", (Term("in", 9e3), Term("x1", -4e3)))
    y = Block("y", "adder", (Term("x1", 0.5), Term("in", 0.3)), both_signs=True)
    graph = BlockGraph("test", (x, y), "y")
    sizing = Sizing(capacitors={"x1": 1e-8}, feedback={"y": 1e4}, inverters=1e4)
    job = job_for(butterworth(1, 1e3), (100, 2e3), source_resistance=100.0)
    with pytest.raises(RealizationError, match=r"signal.source_resistance: block y has no virtual"):
        map_graph(graph, choose_polarity(graph), sizing, job)


def test_nets_and_references_follow_the_conventions() -> None:
    """Output net out, ground at every + input, one op-amp a cell, references in order."""
    sketch = sketch_form(job_for(butterworth(3, 1e3), (100, 2e3)), "controllable", FREQUENCY)
    circuit = sketch.circuit
    assert [a.ref for a in circuit.amplifiers] == [f"U{k + 1}" for k in range(len(circuit.cells))]
    assert all(a.plus == "0" for a in circuit.amplifiers)
    assert [c.output for c in circuit.cells].count("out") == 1
    for cell in circuit.cells:
        suffix = "_ns" if cell.kind == "inverter" else "_s"
        assert cell.summing == cell.block + suffix
        for ref in cell.inputs:
            assert circuit.by_ref[ref].sets


def test_a_weak_source_is_met_with_larger_resistors() -> None:
    """10 kohm: the resistors on the source's net draw at most half its voltage, the inverter of
    the input included, and the response is still the target."""
    target = butterworth(2, 1e3)
    job = job_for(target, (100, 2e3), source_resistance=10e3, op_amp="wideband")
    for form in FORMS:
        circuit = sketch_form(job, form, FREQUENCY).circuit
        drawn = sum(1 / p.value for p in circuit.bought if "src" in p.nets)
        assert 10e3 * drawn <= 1.001
        near = FREQUENCY[FREQUENCY < 2e3]
        response = compile_circuit(circuit).solve(near)
        np.testing.assert_allclose(response, target.response(near), rtol=2e-3)
