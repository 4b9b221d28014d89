"""The inverting summing integrator: dv/dt = - sum v_j / (R_j C)."""

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

__all__ = ["integrator_cell"]


def integrator_cell(
    numbering: Numbering,
    *,
    block: str,
    output: str,
    inputs: Sequence[CellInput],
    capacitance: float,
    rules: CellRules,
    polarity: int,
) -> BuiltCell:
    """The cell of integrator `block`, driving net `output` through `capacitance` [F].

    An input of weight w [1/s] has the resistance 1 / (|w| C).
    """
    return inverting_cell(
        numbering,
        kind="integrator",
        block=block,
        output=output,
        summing=f"{block}_s",
        inputs=inputs,
        feedback=feedback_part("capacitor", capacitance, rules, f"rate of {block}"),
        rules=rules,
        polarity=polarity,
    )
