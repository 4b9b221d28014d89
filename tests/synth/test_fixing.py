"""Values fixed by hand hold from the scaling to the last choice, in every form."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.design import design
from synth.errors import JobError, RealizationError
from synth.forms import FORMS
from synth.job import Job
from synth.nodal import compile_circuit
from synth.parts import StockItem
from synth.ranking import rank_forms
from synth.readback import graph_of
from synth.transfer import Factor, TransferFunction
from tests.forms import exists
from tests.jobs import capacitor_rule, job_for
from tests.strategies import butterworth

BAND = (100.0, 2e3)
FREQUENCY = np.geomspace(*BAND, 61)
LEAD = TransferFunction.from_factors(6e3, [Factor.real(-1e3)], [Factor.real(-6e3)] * 2)


def fixing(target: TransferFunction = LEAD, form: str = "auto", **options: object) -> Job:
    """A job with `fixed` values, by reference."""
    fixed = options.pop("fixed")
    job = job_for(target, BAND, form=form, **options)
    return replace(job, board=replace(job.board, fixed=tuple(fixed.items())))


def parts_of(form: str, target: TransferFunction = LEAD):
    return sketch_form(job_for(target, BAND), form, FREQUENCY).circuit


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("source_resistance", [0.0, 200.0])
def test_each_part_alone_can_be_fixed_and_the_ideal_circuit_still_is_h(
    form: str, source_resistance: float
) -> None:
    """A third above its ideal value, which the levels or the other impedances make up for, up to
    the steps of the capacitors and where the factor of a source resistance settles."""
    target = LEAD if exists(form, LEAD) else butterworth(2, 1e3)
    # Every other part of three forms; some of the others, whose cells are the same.
    step = 2 if form in ("controllable", "observable", "cascade") else 4
    for part in parts_of(form, target).bought[::step]:
        value = float(f"{part.ideal * 1.3:.2g}")
        check_ideal(form, {part.ref: value}, source_resistance, target)


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("source_resistance", [0.0, 200.0])
def test_an_inverter_with_two_fixed_resistors_is_made_up_for(
    form: str, source_resistance: float
) -> None:
    """Whatever its gain, and wherever it stands: behind the input, within, before the output."""
    some = (LEAD, *(butterworth(n, 1e3) for n in (1, 2, 3)))
    for target in (t for t in some if exists(form, t)):
        for cell in parts_of(form, target).cells:
            if cell.kind == "inverter":
                fixed = {cell.inputs[0]: 10e3, cell.feedback: 18e3}
                check_ideal(form, fixed, source_resistance, target)


def check_ideal(
    form: str,
    fixed: dict[str, float],
    source_resistance: float,
    target: TransferFunction = LEAD,
) -> None:
    """The ideal circuit has the fixed values, marked, and shows H."""
    fine = capacitor_rule("E192")
    job = fixing(target, form, fixed=fixed, source_resistance=source_resistance, capacitors=fine)
    circuit = sketch_form(job, form, FREQUENCY).circuit
    found = {p.ref: p.value for p in circuit.passives if p.fixed}
    assert found == fixed
    assert all(circuit.by_ref[ref].ideal == value for ref, value in fixed.items())
    read = graph_of(circuit).at(2j * np.pi * FREQUENCY)
    np.testing.assert_allclose(read, target.response(FREQUENCY), rtol=0.01, err_msg=str(fixed))


def test_fixed_values_stay_through_the_whole_design() -> None:
    """A capacitor, an input resistor and one of an inverter; the rest makes up for them."""
    plain = parts_of("controllable", butterworth(2, 1e3))
    inverter = next(c for c in plain.cells if c.kind == "inverter")
    fixed = {"C1": 3.9e-9, "R1": 10.1e3, inverter.feedback: 15.55e3}
    found = design(fixing(butterworth(2, 1e3), "controllable", fixed=fixed), boards=20)
    for ref, value in fixed.items():
        part = found.circuit.by_ref[ref]
        assert (part.value, part.fixed) == (value, True)
    assert found.circuit.by_ref[inverter.feedback].source == "fixed"
    assert found.circuit.by_ref["C1"].source == "E12"
    assert found.nominal.rms < 2e-3
    sketch = sketch_form(found.job, "controllable", FREQUENCY).circuit
    assert sketch.by_ref[inverter.inputs[0]].value == pytest.approx(15.55e3)


def test_values_that_do_not_quite_agree_are_met_by_the_rest() -> None:
    """R2 C1 alone sets the pole: 2 % off, and taken as it is; the gain follows it."""
    target = TransferFunction.from_factors(-5e3, [], [Factor.real(-5e3)])
    job = fixing(target, "observable", fixed={"R2": 20.4e3, "C1": 10e-9})
    found = design(job, boards=20)
    exact = TransferFunction.from_factors(-5e3, [], [Factor.real(-1 / (20.4e3 * 10e-9))]).response(
        found.frequency_hz
    )
    shown = compile_circuit(found.circuit).solve(found.frequency_hz)
    assert 5e-3 < found.nominal.rms < 2e-2
    assert np.std(np.log(np.abs(shown / exact))) < 1e-3


def test_values_that_contradict_h_are_refused_with_what_it_needs() -> None:
    """The pole at 5000/s wants 20 kohm with 10 nF; met half-way, 28.3 kohm with 7.07 nF."""
    target = TransferFunction.from_factors(-5e3, [], [Factor.real(-5e3)])
    job = fixing(target, "observable", fixed={"R2": 40e3, "C1": 10e-9})
    with pytest.raises(
        RealizationError,
        match=r"board.fixed.C1: got 10 nF beside R2 = 40 kohm, but .* need about 7.07\d nF",
    ):
        sketch_form(job, "observable", FREQUENCY)


def test_a_reference_no_form_has_is_refused_with_those_there_are() -> None:
    """Named form, and auto."""
    with pytest.raises(JobError, match=r"board.fixed.R77: got a reference .*, expected R1 to R\d"):
        sketch_form(fixing(fixed={"R77": 1e4}), "cascade", FREQUENCY)
    with pytest.raises(JobError, match=r"board.fixed.C3: got a reference .*, expected C1 to C2"):
        rank_forms(fixing(fixed={"C3": 1e-9}), FREQUENCY, seed=1)


def test_a_form_without_the_reference_is_not_possible_and_another_is_taken() -> None:
    target = butterworth(3, 1e3)
    counts = {f: sum(p.kind == "resistor" for p in parts_of(f, target).bought) for f in FORMS}
    most = max(counts.values())
    assert min(counts.values()) < most
    found = rank_forms(fixing(target, fixed={f"R{most}": 12e3}), FREQUENCY, seed=1)
    assert found.sketch.circuit.by_ref[f"R{most}"].value == 12e3
    for candidate in found.candidates:
        assert candidate.possible == (counts[candidate.form] == most)
        assert candidate.possible or f"R{most}: got a reference" in candidate.reason


def test_everything_may_be_fixed() -> None:
    """The board that was built comes back, and nothing else."""
    job = job_for(butterworth(2, 1e3), BAND, form="cascade")
    built = design(job, boards=20).circuit
    fixed = {p.ref: p.value for p in built.bought}
    again = design(fixing(butterworth(2, 1e3), "cascade", fixed=fixed), boards=20)
    assert {p.ref: p.value for p in again.circuit.bought} == fixed


@pytest.mark.parametrize(
    ("fixed", "message"),
    [
        ((("U1", 1e4),), "board.fixed.U1: got 'U1', expected a reference such as 'R3' or 'C1'"),
        ((("R1", 10.0),), "board.fixed.R1: got 10 ohm, expected 1 kohm to 1 Mohm"),
        ((("R1", 1e4), ("R1", 1e4)), "board.fixed.R1: got two values, expected one"),
    ],
)
def test_a_board_checks_what_it_is_given(fixed, message: str) -> None:
    board = job_for(LEAD, BAND).board
    with pytest.raises(JobError, match=message):
        replace(board, fixed=fixed)


def test_a_fixed_value_must_be_in_the_stock() -> None:
    board = job_for(LEAD, BAND).board
    rule = replace(board.resistors, stock=(StockItem(value=1e4, tolerance=0.01, count=1),))
    with pytest.raises(JobError, match="R2: got 12 kohm, expected a value in the stock"):
        replace(board, resistors=rule, fixed=(("R1", 1e4), ("R2", 12e3)))
    with pytest.raises(JobError, match="got R1, R2 of 10 kohm, expected at most the 1"):
        replace(board, resistors=rule, fixed=(("R1", 1e4), ("R2", 1e4)))


def test_every_part_of_a_cell_at_both_inputs_can_be_fixed_but_what_balances_them() -> None:
    """That one follows from the others; the message says so."""
    target = butterworth(2, 1e3)
    circuit = parts_of("khn", target)
    cell = next(c for c in circuit.cells if c.kind == "difference")
    for ref in (*cell.inputs, cell.feedback):
        value = float(f"{circuit.by_ref[ref].ideal * 1.3:.2g}")
        check_ideal("khn", {ref: value}, 0.0, target)
        check_ideal("khn", {ref: value}, 200.0, target)
    with pytest.raises(JobError, match=rf"board.fixed.{cell.balance}: .* balances the two inputs"):
        sketch_form(fixing(target, "khn", fixed={cell.balance: 1e4}), "khn", FREQUENCY)
