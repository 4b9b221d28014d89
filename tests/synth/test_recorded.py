"""Pairs of resistors in an earlier design, and what its drawer leaves for a part."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.choosing.pairs import Pair, with_pairs
from synth.circuit import Circuit
from synth.design import design
from synth.errors import JobError, RealizationError
from synth.grid import judging_frequencies
from synth.job import Accept, Job
from synth.nodal import compile_circuit
from synth.parts import PartRule, StockItem
from synth.recorded import Earlier, RecordedPart, paired, rebuilt
from synth.repicking import Request, repick
from synth.shortages import Shortage
from synth.transfer import Factor, TransferFunction
from tests.jobs import capacitor_rule, job_for, resistor_rule
from tests.strategies import butterworth

BAND = (100.0, 1e4)
W0 = 2 * np.pi * 1e3
TWO_POLES = TransferFunction.from_factors(
    3.3 * W0**2, [], [Factor.real(-W0), Factor.real(-3.3 * W0)]
)


def recorded(circuit: Circuit) -> tuple[RecordedPart, ...]:
    return tuple(
        RecordedPart(ref=p.ref, kind=p.kind, nets=p.nets, value=p.value) for p in circuit.bought
    )


def pole(**options) -> Job:
    """A pole at 1 kHz, with pairs where the limits ask for them."""
    options = {
        "form": "cascade",
        "resistors": resistor_rule("E24"),
        "capacitors": capacitor_rule("E6"),
        "op_amp": "wideband",
        "accept": Accept(magnitude_db=0.03, phase_deg=0.2),
    } | options
    job = job_for(butterworth(1, 1e3), BAND, **options)
    return replace(job, board=replace(job.board, pairs=True))


def sketched(job: Job) -> Circuit:
    frequency = judging_frequencies(job.target, job.signal.band_hz)
    return sketch_form(job, job.board.form, frequency).circuit


@pytest.mark.parametrize("how", ["parallel", "series"])
def test_recorded_pairs_are_found_by_their_references_and_nets(how) -> None:
    """Whatever the values; the circuit rebuilt is the one that was recorded."""
    one = sketched(pole())
    refs = [cell.inputs[0] for cell in one.cells]
    assert len(refs) > 1
    pairs = tuple(Pair(ref=ref, values=(47e3, 10e3), how=how) for ref in refs)
    old = with_pairs(one, pairs)
    parts = tuple(replace(p, value=1e4 if p.kind == "resistor" else 1e-8) for p in recorded(old))
    found = rebuilt(paired(one, parts), parts)
    assert found.cells == old.cells
    assert recorded(found) == parts
    assert [p.sets for p in found.passives] == [p.sets for p in old.passives]


def test_what_is_no_pair_of_the_circuit_is_refused() -> None:
    """One of two, two of which the circuit has neither, other nets, and beside the one."""
    one = sketched(pole())
    ref = one.cells[-1].inputs[0]
    old = with_pairs(one, (Pair(ref=ref, values=(47e3, 10e3), how="series"),))
    records = recorded(old.with_values({p.ref: 1e4 for p in old.bought if p.kind == "resistor"}))
    parts = {p.ref: p for p in records}
    first, second = parts[f"{ref}A"], parts[f"{ref}B"]
    for message, found in (
        (f"{ref}A.ref: got '{ref}A', expected", [p for p in parts.values() if p is not second]),
        ("R77A.ref: got 'R77A', expected", [*parts.values(), replace(first, ref="R77A")]),
        (f"{ref}A.ref: got '{ref}A', expected", [*parts.values(), replace(first, ref=ref)]),
        (
            f"{ref}A.nets: {ref}A has 'a b', expected",
            [replace(p, nets=("a", "b")) for p in (first, second)],
        ),
    ):
        given = found if len(found) > 2 else [*{**parts, **{p.ref: p for p in found}}.values()]
        with pytest.raises(JobError, match=message):
            rebuilt(paired(one, given), given)


@pytest.mark.parametrize("largest", [1e6, 1e4])
def test_a_design_with_pairs_is_made_again_without_one_of_two(largest) -> None:
    """The other stays or changes, the two are still two, and the limits hold."""
    job = pole(resistors=replace(resistor_rule("E24"), largest=largest))
    old = design(job, boards=20)
    (part,) = (p for p in old.circuit.bought if p.ref.endswith("A"))
    gone = Shortage(kind="resistor", value=part.value, ref=part.ref)
    earlier = Earlier(job=job, form=old.form, parts=recorded(old.circuit), boards=20, seed=1)
    new = repick(earlier, Request(shortages=(gone,)))
    assert new.repick is not None
    assert new.repick.before.rms == pytest.approx(old.nominal.rms, rel=1e-9)
    assert [p.ref for p in new.circuit.bought] == [p.ref for p in old.circuit.bought]
    assert new.circuit.by_ref[part.ref].value != part.value
    assert new.nominal.largest_db <= 0.03 and new.nominal.largest_deg <= 0.2
    again = Earlier(job=job, form=new.form, parts=recorded(new.circuit), boards=20, seed=1)
    circuit = rebuilt(paired(sketched(job), again.parts), again.parts)
    assert (compile_circuit(circuit).solve(new.frequency_hz)).tolist() == pytest.approx(
        compile_circuit(new.circuit).solve(new.frequency_hz).tolist(), rel=1e-9
    )


def test_a_board_with_pairs_is_freed_until_it_meets_its_limits() -> None:
    """Two poles whose limits only pairs meet, without one of the capacitors: each pair is one
    value of its own in the search, as in a new design.  The resistors of the pairs, chosen one by
    one, miss the limits."""
    job = replace(
        pole(capacitors=capacitor_rule("E6")),
        target=TWO_POLES,
        accept=Accept(magnitude_db=0.03, phase_deg=0.2),
    )
    old = design(job, boards=20)
    assert sum(p.ref.endswith("A") for p in old.circuit.bought) == 2
    parts = recorded(old.circuit)
    earlier = Earlier(job=job, form=old.form, parts=parts, boards=20, seed=1)
    first = next(p for p in old.circuit.bought if p.kind == "capacitor")
    gone = Shortage(kind="capacitor", value=first.value, ref=first.ref)
    new = repick(earlier, Request(shortages=(gone,)))
    assert new.nominal.largest_db <= 0.03 and new.nominal.largest_deg <= 0.2
    assert [p.ref for p in new.circuit.bought] == [p.ref for p in old.circuit.bought]
    assert not any("further pair" in text for text in new.notices)


def test_limits_that_only_new_pairs_meet_are_missed_with_a_notice() -> None:
    """The pair stays two parts, and a repick that may change nothing else says why it fails."""
    job = pole()
    old = design(job, boards=20)
    (part,) = (p for p in old.circuit.bought if p.kind == "capacitor")
    kept = tuple(p.ref for p in old.circuit.bought if p is not part)
    earlier = Earlier(job=job, form=old.form, parts=recorded(old.circuit), boards=20, seed=1)
    gone = Shortage(kind="capacitor", value=part.value, ref=part.ref)
    new = repick(earlier, Request(shortages=(gone,), bought=kept))
    assert new.nominal.largest_db > 0.03
    assert any("puts no further pair of resistors" in text for text in new.notices)


def drawer(*lines: tuple[float, int]) -> PartRule:
    stock = tuple(StockItem(value=v, tolerance=0.01, count=n) for v, n in lines)
    return replace(resistor_rule(), stock=stock)


def of_two(rule: PartRule) -> Earlier:
    """A first-order board of two resistors, 10 kohm and 22 kohm."""
    accept = Accept(magnitude_db=20.0, phase_deg=80.0)
    job = job_for(butterworth(1, 1e3), BAND, inverted="yes", resistors=rule, accept=accept)
    found = sketched(replace(job, board=replace(job.board, form="cascade")))
    resistors = [p.ref for p in found.bought if p.kind == "resistor"]
    assert resistors == ["R1", "R2"]
    board = found.with_values({"R1": 1e4, "R2": 2.2e4, "C1": 10e-9})
    return Earlier(job=job, form="cascade", parts=recorded(board), boards=20, seed=1)


def test_what_others_hold_of_a_drawer_is_not_taken_twice() -> None:
    """All that is left for R1 is the value of R2, so R2 is freed and they change places."""
    rule = drawer((1e4, 1), (2.2e4, 1))
    new = repick(of_two(rule), Request(shortages=(Shortage(kind="resistor", value=1e4, ref="R1"),)))
    values = {p.ref: p.value for p in new.circuit.bought if p.kind == "resistor"}
    assert values == {"R1": 2.2e4, "R2": 1e4}
    assert new.repick is not None and new.repick.missing == ("R1",)


def test_a_drawer_with_nothing_left_is_refused() -> None:
    """R2 is bought and has the only other value."""
    gone = Shortage(kind="resistor", value=1e4, ref="R1")
    with pytest.raises(
        RealizationError, match=r"got R1, R2 of 22 kohm, expected at most the 1 in the"
    ):
        repick(of_two(drawer((1e4, 1), (2.2e4, 1))), Request(shortages=(gone,), bought=("R2",)))
