"""The summing amplifier that uses both inputs of its op-amp.

With conductances G_k from voltages v_k into the non-inverting input, G_j from v_j into the
inverting one, and R_f back to that::

    v = (1 + R_f sum G_j) (sum G_k v_k) / (sum G_k) - sum R_f G_j v_j

where both sums of conductances count a resistor to ground at their input.  Gains n_j and p_k,
their sums N and P, come out right with R_j = R_f / n_j, R_k = R_f / p_k and one resistor to
ground, R_f / |1 + N - P|: at the non-inverting input where P is smaller than 1 + N, at the
inverting one where it is larger, none where they are equal.  Then both inputs see the same
resistance, R_f / max(1 + N, P), so that bias currents cancel, and its inverse times R_f is the
noise gain (algebra).
"""

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
from synth.circuit import GROUND, Passive

__all__ = ["Balance", "balance_of", "difference_cell"]

# Whether it stands at the non-inverting input, and its resistance [ohm].
Balance = tuple[bool, float]

# Sums of gains closer than this count as this far apart: a resistor is there, whatever the values.
CLOSEST = 1e-9


def balance_of(inputs: Sequence[CellInput], feedback: float) -> Balance:
    """The resistor to ground with which every input has the gain `feedback` over its resistance."""
    at_minus, at_plus = (
        sum(feedback / each.resistance for each in inputs if each.at_plus is side)
        for side in (False, True)
    )
    gap = 1 + at_minus - at_plus
    return gap >= 0, feedback / max(abs(gap), CLOSEST)


def difference_cell(
    numbering: Numbering,
    *,
    block: str,
    output: str,
    inputs: Sequence[CellInput],
    balance: Balance | None,
    feedback: float,
    rules: CellRules,
    polarity: int,
) -> BuiltCell:
    """The cell of adder `block`, driving net `output` through `feedback` [ohm].

    `balance` is that of `balance_of`, or None for a cell without one.
    """
    summing, plus = f"{block}_s", f"{block}_p"
    leg = (
        None if balance is None else _leg(block, plus if balance[0] else summing, balance[1], rules)
    )
    return inverting_cell(
        numbering,
        kind="difference",
        block=block,
        output=output,
        summing=summing,
        inputs=inputs,
        feedback=feedback_part("resistor", feedback, rules, f"level of {block}"),
        rules=rules,
        polarity=polarity,
        plus=plus,
        balance=leg,
    )


def _leg(block: str, net: str, value: float, rules: CellRules) -> Passive:
    return Passive(
        ref="R",
        kind="resistor",
        nets=(GROUND, net),
        value=value,
        ideal=value,
        rule=rules.resistors,
        sets=f"balance of the two inputs of {block}",
    )
