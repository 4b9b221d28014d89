"""The two CSV tables hold what the contract with scripts says."""

from __future__ import annotations

import csv
import io

import numpy as np
import pytest

from netlist.partslist import parts_list
from netlist.tables import parts_table, response_table
from tests.netlist import boards

MADE = boards.design()


def rows(text):
    return list(csv.DictReader(io.StringIO(text)))


def test_the_headers_are_exactly_those_scripts_rely_on():
    response = response_table(MADE, boards.verification(MADE))
    parts = parts_table(parts_list(MADE.circuit, supply=(-12.0, 12.0)))
    assert response.splitlines()[0] == (
        "frequency_hz,target_db,target_deg,simulated_db,simulated_deg,error_db,error_deg"
    )
    assert parts.splitlines()[0] == "refs,quantity,kind,value,marking,series,tolerance,note"


def test_the_response_table_gives_target_and_simulated_response_back():
    checked = boards.verification(MADE)
    table = rows(response_table(MADE, checked))

    def column(name):
        return np.array([float(r[name]) for r in table])

    def response(kind):
        level, phase = column(f"{kind}_db"), column(f"{kind}_deg")
        return 10 ** (level / 20) * np.exp(1j * np.radians(phase))

    np.testing.assert_allclose(column("frequency_hz"), checked.frequency_hz, rtol=1e-11)
    np.testing.assert_allclose(response("target"), checked.target, rtol=1e-9)
    np.testing.assert_allclose(response("simulated"), checked.simulated, rtol=1e-9)
    assert np.abs(np.diff(column("target_deg"))).max() < 90
    worst = float(np.abs(column("error_db")).max())
    assert worst == pytest.approx(checked.error.largest_db, rel=1e-9)


def test_without_a_simulation_the_simulated_columns_are_empty():
    table = rows(response_table(MADE, boards.verification(MADE, failure="no ngspice")))
    assert len(table) == len(MADE.frequency_hz)
    for name in ("simulated_db", "simulated_deg", "error_db", "error_deg"):
        assert {r[name] for r in table} == {""}
    assert float(table[0]["target_db"]) == pytest.approx(0.000332, abs=1e-5)


def test_parts_have_a_quantity_that_counts_their_references():
    table = rows(parts_table(parts_list(MADE.circuit, supply=(-12.0, 12.0))))
    assert all(int(r["quantity"]) == len(r["refs"].split()) for r in table)
    by_refs = {r["refs"]: r for r in table}
    assert by_refs["R1 R3"] == {
        "refs": "R1 R3",
        "quantity": "2",
        "kind": "resistor",
        "value": "15800.0",
        "marking": "15K8",
        "series": "E96",
        "tolerance": "0.01",
        "note": "",
    }
