"""The parts list buys what the board needs, once."""

from __future__ import annotations

import csv
import io
from dataclasses import replace

import pytest

from netlist.partslist import dielectric, packages, parts_list, rated_voltage
from netlist.report.found import part_rows
from netlist.tables import parts_table
from synth.population import Network
from tests.netlist import boards

RAILS = (-12.0, 12.0)


def lines_by_kind():
    out = {}
    for line in parts_list(boards.circuit(), supply=RAILS):
        out.setdefault(line.kind, []).append(line)
    return out


def test_every_part_of_the_circuit_is_on_exactly_one_line():
    made = boards.circuit()
    refs = [r for line in parts_list(made, supply=RAILS) for r in line.refs]
    assert len(refs) == len(set(refs))
    assert {p.ref for p in made.bought} | {a.ref for a in made.amplifiers} <= set(refs)


def test_identical_parts_share_a_line_and_others_do_not():
    resistors = lines_by_kind()["resistor"]
    assert [(x.refs, x.value) for x in resistors] == [
        (("R5", "R6"), 10e3),
        (("R2",), 14.3e3),
        (("R1", "R3"), 15.8e3),
        (("R4",), 16.2e3),
    ]


def test_the_buyer_is_told_of_matched_networks_and_stated_values():
    """R1 and R3 share a value, R1 and R4 are a network: three lines, the network named on both of
    its own; in the table the remark is the last column."""
    made = boards.circuit()
    made = replace(
        made,
        passives=tuple(replace(p, fixed=True) if p.ref == "R3" else p for p in made.passives),
    )
    network = Network(refs=("R4", "R1"), tolerance=1e-3, tracking=5e-6)
    lines = parts_list(made, supply=RAILS, networks=(network,))
    notes = {line.refs: line.note for line in lines if line.kind == "resistor"}
    told = "matched network R1 R4: ratio within 0.1 %, tracking 5 ppm/K"
    assert notes == {
        ("R5", "R6"): "",
        ("R2",): "",
        ("R3",): "value of R3 stated in the job",
        ("R1",): told,
        ("R4",): told,
    }
    rows = list(csv.DictReader(io.StringIO(parts_table(lines))))
    assert [r["note"] for r in rows] == [line.note for line in lines]
    (shown,) = [r for r in part_rows(lines) if r["refs"] == "R4"]
    assert shown["note"] == told


def test_what_hangs_on_the_terminals_is_not_bought():
    made = boards.circuit()
    load = replace(made.passives[0], ref="RLOAD", nets=("out", "0"), value=1e4, rule=None)
    loaded = replace(made, passives=(*made.passives, load))
    assert parts_list(loaded, supply=RAILS) == parts_list(made, supply=RAILS)


@pytest.mark.parametrize(
    ("op_amps", "sizes", "spares"),
    [
        (1, [2], 1),
        (2, [2], 0),
        (3, [4], 1),
        (4, [4], 0),
        (5, [4, 2], 1),
        (6, [4, 2], 0),
        (7, [4, 4], 1),
        (9, [4, 4, 2], 1),
    ],
)
def test_op_amps_take_the_fewest_packages_and_then_the_fewest_spares(op_amps, sizes, spares):
    """Checked against trying every number of packages of two and four."""
    amplifier = boards.circuit().amplifiers[0]
    amplifiers = [replace(amplifier, ref=f"U{k + 1}") for k in range(op_amps)]
    found = packages(amplifiers)
    assert [p.size for p in found] == sizes
    assert sum(len(p.spares) for p in found) == spares
    fits = [(a + b, 2 * a + 4 * b - op_amps) for a in range(6) for b in range(4)]
    assert (len(sizes), spares) == min(f for f in fits if f[1] >= 0)
    held = [r for p in found for r in p.op_amps]
    assert held == [a.ref for a in amplifiers]
    assert not set(held) & {r for p in found for r in p.spares}


def test_decoupling_is_one_capacitor_per_supply_pin_and_bulk_one_per_rail():
    kinds = lines_by_kind()
    assert kinds["decoupling_capacitor"][0].quantity == 2 * len(kinds["package"])
    assert kinds["bulk_capacitor"][0].quantity == 2
    assert kinds["decoupling_capacitor"][0].value == pytest.approx(100e-9, rel=1e-12)


def test_capacitors_name_dielectric_and_rating():
    """24 V from rail to rail, twice that is 48 V: the next standard rating is 50 V."""
    assert lines_by_kind()["capacitor"][0].marking == "10n C0G 50V"
    assert dielectric(100e-9) == "C0G"
    assert dielectric(120e-9) == "PP/PPS film"
    assert [rated_voltage(v) for v in (3.0, 12.5, 12.6, 30.0)] == [6.3, 25.0, 35.0, 63.0]
