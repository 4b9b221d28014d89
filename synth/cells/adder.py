"""The inverting summing amplifier: v = - sum v_j R_f / R_j."""

from __future__ import annotations

from collections.abc import Sequence

from synth.cells.common import (
    BuiltCell,
    CellInput,
    CellRules,
    Numbering,
    feedback_part,
    inverting_cell,
)

__all__ = ["adder_cell"]


def adder_cell(
    numbering: Numbering,
    *,
    block: str,
    output: str,
    inputs: Sequence[CellInput],
    feedback: float,
    rules: CellRules,
    polarity: int,
) -> BuiltCell:
    """The cell of adder `block`, driving net `output` through `feedback` [ohm].

    An input of weight k has the resistance R_f / |k|.
    """
    return inverting_cell(
        numbering,
        kind="adder",
        block=block,
        output=output,
        summing=f"{block}_s",
        inputs=inputs,
        feedback=feedback_part("resistor", feedback, rules, f"level of {block}"),
        rules=rules,
        polarity=polarity,
    )
