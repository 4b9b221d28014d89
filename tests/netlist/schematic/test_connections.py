"""What can be drawn, and what is refused in one clear line."""

from __future__ import annotations

from dataclasses import replace

import pytest

from netlist.schematic import draw_schematic
from netlist.schematic.connections import BOARD_INPUT, read_connections
from synth.circuit import Circuit
from synth.errors import CircuitError
from tests.netlist.schematic import boards


def refused(circuit: Circuit, match: str) -> None:
    with pytest.raises(CircuitError, match=match):
        draw_schematic(circuit, title="t")


def test_a_circuit_without_cells_is_refused():
    refused(replace(boards.first_order(), cells=()), "circuit without cells")


def test_parts_outside_the_cells_are_refused_by_name():
    builder = boards.Builder()
    builder.cell("integrator", "out", ["in", "out"])
    builder.fixture("R9", ("in", "out"), 1e3)
    refused(builder.circuit(), "parts outside the cells: R9")
    board = boards.third_order()
    refused(replace(board, cells=board.cells[:-1]), r"outside the cells: .*U5")


def test_a_bridge_into_a_summing_node_is_no_source_resistor():
    builder = boards.Builder()
    builder.cell("integrator", "out", ["in", "out"])
    builder.fixture("R9", ("in", "out_s"), 1e3)
    refused(builder.circuit(), "parts outside the cells: R9")


def test_an_output_that_no_cell_drives_is_refused():
    refused(replace(boards.first_order(), output_net="in"), "output net 'in', which no cell drives")


def test_a_net_that_nothing_drives_is_refused():
    builder = boards.Builder()
    builder.cell("integrator", "out", ["in", "ghost", "ghost"])
    refused(builder.circuit(), "'ghost', which no cell drives")


def test_an_op_amp_whose_input_is_not_at_ground_is_refused():
    board = boards.first_order()
    lifted = replace(board.amplifiers[0], plus="in")
    refused(replace(board, amplifiers=(lifted,)), "got U1 between nets in, out_s, out, expected 0")


def test_a_capacitor_as_input_is_refused():
    board = boards.first_order()
    first = replace(board.passives[0], kind="capacitor")
    refused(replace(board, passives=(first, *board.passives[1:])), "the capacitor R1 between")


def test_the_main_path_leads_through_the_chain():
    """From the output back, each time to the nearest earlier cell: x1, x2, x3, input."""
    found = read_connections(boards.third_order())
    cells = found.circuit.cells
    assert [cells[k].output for k in found.main] == ["out", "x1", "x2", "x3"]
    assert found.signals[found.entry].driver == BOARD_INPUT


def test_the_board_is_entered_behind_the_source_resistor():
    assert read_connections(boards.third_order()).entry == "src"
    assert read_connections(boards.third_order(source=False)).entry == "in"
