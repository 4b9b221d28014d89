"""Standard values for a whole circuit at once.

Input: a circuit with ideal values, the response it must show, and how far its op-amp outputs
may rise.  Output: the same circuit with values from its series, and one with every value
rounded to its nearest neighbour, to compare with.  Called by `synth.design` only.
"""

from synth.choosing.choose import DEFAULT_EFFORT, Choice, choose_values, with_ideal_op_amps
from synth.choosing.model import Level
from synth.choosing.refine import refine
from synth.choosing.task import Task

__all__ = [
    "DEFAULT_EFFORT",
    "Choice",
    "Level",
    "Task",
    "choose_values",
    "refine",
    "with_ideal_op_amps",
]
