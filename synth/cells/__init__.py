"""Circuit cells, one a file: each builds the parts that realise one block.

A cell function takes a `Numbering`, its nets, its weighted inputs and the rules for parts,
and returns a `BuiltCell` with ideal values.  All cells invert, but for the inputs that
`difference` takes at the other input of its op-amp.
"""

from synth.cells.adder import adder_cell
from synth.cells.common import BuiltCell, CellInput, CellRules, Numbering
from synth.cells.difference import balance_of, difference_cell
from synth.cells.integrator import integrator_cell
from synth.cells.inverter import inverter_cell

__all__ = [
    "BuiltCell",
    "CellInput",
    "CellRules",
    "Numbering",
    "adder_cell",
    "balance_of",
    "difference_cell",
    "integrator_cell",
    "inverter_cell",
]
