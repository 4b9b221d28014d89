"""The inverter: v = - v_in, two equal resistors."""

from __future__ import annotations

from synth.cells.common import BuiltCell, CellInput, CellRules, Numbering, inverting_cell
from synth.circuit import Passive

__all__ = ["inverter_cell"]


def inverter_cell(
    numbering: Numbering,
    *,
    block: str,
    source: CellInput,
    output: str,
    feedback: float,
    rules: CellRules,
    polarity: int,
) -> BuiltCell:
    """The cell that inverts the signal of `block` from net ``source.net`` onto `output`."""
    resistor = Passive(
        ref="R",
        kind="resistor",
        nets=("", ""),
        value=feedback,
        ideal=feedback,
        rule=rules.resistors,
        sets=f"inverter of {block}",
    )
    return inverting_cell(
        numbering,
        kind="inverter",
        block=block,
        output=output,
        summing=f"{block}_ns",
        inputs=(source,),
        feedback=resistor,
        rules=rules,
        polarity=polarity,
    )
