"""Boards with pairs of resistors and shared values, from the job to ngspice and the parts list."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from netlist import design, verify, write_pack
from netlist.partslist import parts_list
from synth.job import Accept, Job
from synth.parts import PartRule
from synth.transfer import Factor, TransferFunction
from tests.jobs import capacitor_rule, job_for, resistor_rule
from tests.strategies import butterworth

W0 = 2 * np.pi * 1e3
ONE_POLE = TransferFunction.from_factors(-W0, [], [Factor.real(-W0)])


def job_of(resistors: PartRule, capacitors: PartRule, **board: bool) -> Job:
    job = job_for(
        ONE_POLE,
        (100.0, 1e4),
        form="cascade",
        resistors=resistors,
        capacitors=capacitors,
        op_amp="wideband",
        accept=Accept(magnitude_db=0.03, phase_deg=0.2),
    )
    return replace(job, board=replace(job.board, **board))


WIDE = (resistor_rule("E24"), capacitor_rule("E6"))
LOW = (
    PartRule(kind="resistor", series="E24", tolerance=0.01, smallest=1e3, largest=1e4),
    PartRule(kind="capacitor", series="E6", tolerance=0.05, smallest=15e-9, largest=22e-9),
)


@pytest.mark.parametrize(("rules", "how"), [(WIDE, "parallel"), (LOW, "series")])
def test_ngspice_confirms_what_pairs_gain(tmp_path, simulator, rules, how) -> None:
    """The job fails with single parts and passes with pairs; both engines agree; the pack, with
    its drawings and lists, is written with the new parts."""
    single = design(job_of(*rules), boards=50)
    assert not verify(single, simulator=simulator).checks[0].passed
    paired = design(job_of(*rules, pairs=True), boards=50)
    proof = verify(paired, simulator=simulator)
    assert [c.passed for c in proof.checks[:2]] == [True, True]
    assert proof.nodal_disagreement < 1e-6
    assert any(f"R1 is two resistors in {how}, R1A and R1B" in text for text in paired.notices)
    assert len(paired.circuit.bought) == len(single.circuit.bought) + 2
    write_pack(tmp_path / "pack", paired, proof)
    for name in ("report.html", "schematic.svg", "parts.csv", "board.cir", "design.json"):
        assert "R1B" in (tmp_path / "pack" / name).read_text(encoding="utf-8"), name


def test_shared_values_make_a_shorter_parts_list() -> None:
    """A Butterworth of order 3 from E24: fewer lines of resistors and capacitors, and a notice."""
    job = job_for(
        butterworth(3, 1e3), (100.0, 2e3), form="controllable", resistors=resistor_rule("E24")
    )
    plain = design(job, boards=50)
    shared = design(replace(job, board=replace(job.board, share_values=True)), boards=50)

    def lines(found) -> int:
        made = parts_list(found.circuit, supply=found.job.board.supply)
        return sum(line.kind in ("resistor", "capacitor") for line in made)

    assert lines(shared) < lines(plain)
    assert all(c.passed for c in shared.checks)
    fewer = lines(plain) - lines(shared)
    assert any(text.startswith(f"{fewer} fewer distinct values") for text in shared.notices)
    assert "distinct" not in " ".join(plain.notices)
