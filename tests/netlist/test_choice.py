"""What report and record say of the choice of values is what is known of it, and no more."""

from __future__ import annotations

import json
import re
from dataclasses import replace

import pytest

from netlist.partslist import parts_list
from netlist.records import design_record, record_text
from netlist.report.choice import (
    allowance_rows,
    binding_lines,
    budget_lines,
    budget_rows,
    proof_line,
)
from netlist.report.page import report_page
from synth.choosing.bottlenecks import Bottleneck
from synth.nodal import compile_circuit
from synth.population import Network, PartSpread, Population
from synth.results import SpreadShare
from synth.tolerance import error_budget
from tests.netlist import boards

MADE = boards.design()
BARE = replace(MADE, certificate=None, allowance=None, budget=None)
VERIFIED = boards.verification(MADE)


def page(design) -> str:
    text = report_page(
        design,
        boards.verification(design),
        drawings=boards.drawings(),
        lines=parts_list(design.circuit, supply=design.job.board.supply),
        job_name="low-pass.toml",
    )
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", text)).replace("\xa0", " ")


def plain(text: str) -> str:
    return text.replace("\xa0", " ")


@pytest.mark.parametrize(
    ("changes", "said", "not_said"),
    [
        (
            {"proven": True, "exhausted": True, "lower_bound": 2e-3},
            "Proven best in the linear model: its rms error is 0.200 %, and every other choice",
            "within",
        ),
        (
            {"proven": True, "exhausted": False, "lower_bound": 1.999e-3},
            "Proven best in the linear model to within 0.1 %",
            "every other choice",
        ),
        ({}, "At most 25 % above the best any choice could be", "Proven"),
        (
            {"lower_bound": 0.2e-3},
            "that keeps the levels and impedances gets below 0.0200 %. Whether any lies between",
            "At most",
        ),
        ({"lower_bound": 0.0}, "gets below 0 %", "At most"),
    ],
)
def test_the_proof_is_worded_as_strong_as_it_is(changes, said, not_said) -> None:
    line = plain(proof_line(replace(MADE.certificate, **changes), MADE.circuit))
    assert said in line
    assert not_said not in line


def test_the_proof_says_which_parts_were_no_choice() -> None:
    """Their values are neither tried nor excluded, so nothing is said of others for them."""
    found = replace(MADE.certificate, held=("R1", "C2"))
    assert "choices that leave R1 and C2 as they are." in plain(proof_line(found, MADE.circuit))
    assert (
        "whatever values all other parts that were free had"
        in binding_lines(found, MADE.circuit)[0]
    )
    many = replace(found, held=("R91", "R92", "R93", "C91", "C92"))
    assert "choices that leave 5 parts as they are." in plain(proof_line(many, MADE.circuit))
    but_two = tuple(p.ref for p in MADE.circuit.bought if p.ref not in ("R1", "C2"))
    few = plain(proof_line(replace(found, held=but_two), MADE.circuit))
    assert "choices of R1 and C2 that leave every other part as it is." in few
    record = design_record(replace(MADE, certificate=found), boards.verification(MADE))
    assert record["choice"]["held"] == ["R1", "C2"]


def test_parts_that_bind_are_named_with_what_they_set() -> None:
    """Sets that leave much less than the bound are no reason for it."""
    weak = Bottleneck(refs=("R1", "C2"), rms=0.1e-3)
    found = replace(MADE.certificate, bottlenecks=(*MADE.certificate.bottlenecks, weak))
    (line,) = binding_lines(found, MADE.circuit)
    assert plain(line) == (
        "R2 (damping of x1) and C1 (time constant of x1): whatever values all other parts had, "
        "those on offer for these leave 0.160 %."
    )


def test_a_bound_of_nothing_names_no_parts() -> None:
    found = replace(MADE.certificate, lower_bound=0.0, bottlenecks=())
    assert binding_lines(found, MADE.circuit) == []


def test_allowance_has_a_line_for_each_circuit() -> None:
    rows = allowance_rows(MADE.allowance)
    assert [r["name"].split(",")[0] for r in rows] == [
        "values as chosen",
        "values chosen as if op-amps were ideal",
        "values as chosen",
        "values as chosen",
    ]
    assert "at 0.5 times" in rows[2]["name"]
    assert "at 1.5 times" in rows[3]["name"]
    assert plain(rows[0]["rms"]) == f"{100 * MADE.nominal.rms:.3f} %"


def test_budget_names_the_part_and_what_its_grade_gives() -> None:
    first, second, *kinds = (plain(line) for line in budget_lines(MADE.budget))
    assert first.startswith("A limit is used up most by the magnitude at ")
    assert "where 0.5 dB are allowed" in first
    ref = MADE.budget.part.refs[0]
    assert second.startswith(f"The part whose tighter grade helps most is {ref}: from 5 % to 2 %")
    assert kinds[0].startswith("With all resistors at their next grade: from 1 % to 0.5 %")
    assert kinds[1].startswith("With all capacitors at their next grade: from 5 % to 2 %")


def test_budget_gives_the_smaller_share_in_digits() -> None:
    """100 % beside 0.02 % would be one too many."""
    small = replace(MADE.budget, nominal=0.01, spread=0.1)
    large = replace(MADE.budget, nominal=0.1, spread=0.01)
    assert "0.99 % is the choice of values and the rest part tolerance" in plain(
        budget_lines(small)[0]
    )
    assert "0.99 % is part tolerance and the rest the choice of values" in plain(
        budget_lines(large)[0]
    )


def test_without_a_tighter_grade_the_budget_says_so() -> None:
    found = replace(MADE.budget, part=None, kinds=())
    assert budget_lines(found)[1:] == ["No part has a tighter grade that is commonly sold."]


def test_shares_in_the_table_add_up() -> None:
    """The largest by name, all others in one line."""
    many = tuple(SpreadShare(cause="own", refs=(f"R{k % 6 + 1}",), share=0.1) for k in range(10))
    rows = budget_rows(replace(MADE.budget, shares=many), MADE.circuit)
    assert len(rows) == 9
    assert rows[-1]["ref"] == "2 others"
    assert plain(rows[-1]["share"]) == "20 %"


WARM = Population(
    resistors=PartSpread(lot=0.5, temperature_coefficient=1e-4),
    networks=(Network(refs=("R1", "R4"), tolerance=0.001),),
    temperature=(0, 60),
    gain_bandwidth_spread=0.4,
)


def test_what_drives_the_spread_is_named_where_it_is_more_than_the_parts() -> None:
    """Parts, temperature and op-amps with shares that add up, what a reel and a network share by
    name, and matched parts as one."""
    program = compile_circuit(MADE.circuit)
    found = error_budget(
        program,
        MADE.circuit,
        MADE.nominal,
        MADE.frequency_hz,
        accept=MADE.job.accept,
        seed=1,
        population=WARM,
    )
    assert sum(found.by_cause.values()) == pytest.approx(1)
    first, second, *_ = (plain(line) for line in budget_lines(found))
    assert "the parts at 25 °C, temperature and the gain-bandwidth of the op-amps spread" in first
    assert "and the rest the spread of boards" in first
    shares = re.findall(r"([\d.]+) %(?: is due)? to", second)
    assert sum(map(float, shares)) == pytest.approx(100, abs=0.6)
    assert second.startswith("Of the variance over boards, ")
    assert "% is due to the parts at 25 °C, " in second
    rows = {(r["ref"], r["sets"]) for r in budget_rows(found, MADE.circuit)}
    assert ("R1 and R4", "deviation they share as matched parts") in rows
    assert ("all parts", "drift with temperature") in rows
    record = json.loads(record_text(design_record(replace(MADE, budget=found), VERIFIED)))
    assert record["budget"]["by_cause"].keys() == {"parts", "temperature", "op_amps"}
    assert sum(s["share"] for s in record["budget"]["shares"]) == pytest.approx(1)
    hardly = tuple(
        SpreadShare(cause=cause, refs=("U1",), share=share)
        for cause, share in (("temperature", 0.9995), ("op_amp", 0.0005))
    )
    assert "and under 0.1 % to the gain-bandwidth" in plain(
        budget_lines(replace(found, shares=hardly))[1]
    )
    matched = replace(found, part=replace(found.part, refs=("R1", "R4")))
    assert "The parts whose tighter grade helps most are R1 and R4, which are matched: " in plain(
        " ".join(budget_lines(matched))
    )


def test_the_page_speaks_of_the_population_where_the_job_states_one() -> None:
    warm = replace(MADE, job=replace(MADE.job, board=replace(MADE.job.board, population=WARM)))
    assert "of the population that the run of boards draws from" in page(warm)
    assert "each part independent and uniform within its own" in page(MADE)


def test_the_page_says_all_of_it_and_leaves_out_what_is_not_known() -> None:
    text, bare = page(MADE), page(BARE)
    for heading in ("How good any choice could be", "Allowance for the op-amps", "Error budget"):
        assert heading in text
        assert heading not in bare


def test_the_command_that_repeats_the_design_has_its_effort() -> None:
    assert "--seed 1 --effort 4 " in page(replace(MADE, effort=4))
    assert "--effort" not in page(MADE)


def test_shared_values_are_told_and_the_bound_is_that_of_the_choice_before() -> None:
    """What was proven of the unshared choice is said of that one alone."""
    before = replace(MADE.certificate, rms=1.6e-3, proven=True)
    after = replace(MADE.certificate, rms=3e-3, proven=False, unshared=before)
    said = proof_line(after, MADE.circuit)
    assert said.startswith("Of the choice before values were shared: Proven best")
    assert "went from 0.160\xa0% to 0.300\xa0%; the bound is that of the unshared choice" in said
    record = design_record(replace(MADE, certificate=after), boards.verification(MADE))
    assert record["choice"]["unshared_rms_error"] == 1.6e-3
    assert record["choice"]["proven"] is False


def test_the_record_holds_the_same_for_programs() -> None:
    record = json.loads(record_text(design_record(MADE, boards.verification(MADE))))
    assert record["choice"] == {
        "rms_error": 2e-3,
        "lower_bound": 1.6e-3,
        "gap": pytest.approx(0.2),
        "proven": False,
        "exhausted": False,
        "held": [],
        "binding": [{"refs": ["R2", "C1"], "rms_error": 1.6e-3}],
        "effort": 1,
    }
    allowance = record["op_amp_allowance"]
    assert allowance["with"]["rms_error"] == pytest.approx(MADE.nominal.rms, rel=1e-9)
    assert [o["factor"] for o in allowance["gain_bandwidth_off"]] == [0.5, 1.5]
    budget = record["budget"]
    assert budget["values_share"] + budget["tolerance_share"] == pytest.approx(1)
    assert sum(s["share"] for s in budget["shares"]) == pytest.approx(1)
    assert budget["tighter_part"]["refs"] == list(MADE.budget.part.refs)
    assert [k["kind"] for k in budget["tighter_kinds"]] == ["resistor", "capacitor"]


def test_the_record_leaves_out_what_is_not_known() -> None:
    record = design_record(BARE, boards.verification(BARE))
    assert not {"choice", "op_amp_allowance", "budget"} & record.keys()
