"""A `Circuit` made of cells as a schematic on one sheet.

The stages, one file each::

    connections   which cell drives each net, which resistors read it; the main path
    placement     cells in rows, the order of the resistors within a cell
    links         what is drawn as a wire and what goes by name
    tracks        which tracks the wires take, and in which order
    layout        where everything stands
    routing       the layout drawn: cells and the wires between them
    stages        the cell itself: op-amp, feedback, summing bus, input resistors
    outlets       what stands at an output: net name, flag, port, load
    notes         the corner table
    drawing       puts a sheet together and chooses the best arrangement
    svg           the sheet as text

Everything drawn is a value of `geometry`, from which the SVG is written and from which the
tests read the netlist back.
"""

from __future__ import annotations

from netlist.schematic.drawing import draw_schematic

__all__ = ["draw_schematic"]
