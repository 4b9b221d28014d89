"""The inverter: v = - v_in, two equal resistors."""

from __future__ import annotations

from synth.cells.common import (
    BuiltCell,
    CellInput,
    CellRules,
    Numbering,
    feedback_part,
    inverting_cell,
)

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
    return inverting_cell(
        numbering,
        kind="inverter",
        block=block,
        output=output,
        summing=f"{block}_ns",
        inputs=(source,),
        feedback=feedback_part("resistor", feedback, rules, f"inverter of {block}"),
        rules=rules,
        polarity=polarity,
    )
