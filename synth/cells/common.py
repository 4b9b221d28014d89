"""What the cells share: reference numbers, inputs, and the inverting op-amp around them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

from synth.circuit import GROUND, Amplifier, Cell, Passive
from synth.parts import OpAmp, PartRule

__all__ = ["BuiltCell", "CellInput", "CellRules", "Numbering", "feedback_part", "inverting_cell"]


@dataclass
class Numbering:
    """Hands out references: R1, R2, ... C1, ... U1, ..."""

    used: dict[str, int] = field(default_factory=dict)

    def next(self, letter: str) -> str:
        """The next free reference with that letter."""
        self.used[letter] = self.used.get(letter, 0) + 1
        return f"{letter}{self.used[letter]}"


@dataclass(frozen=True)
class CellInput:
    """One input: the net it comes from, its resistance [ohm], what it sets, and whether it goes
    to the non-inverting input of the op-amp."""

    net: str
    resistance: float
    sets: str
    at_plus: bool = False


@dataclass(frozen=True, kw_only=True)
class CellRules:
    """What the parts of a cell may be."""

    resistors: PartRule
    capacitors: PartRule
    op_amp: OpAmp


@dataclass(frozen=True)
class BuiltCell:
    """The parts of one cell."""

    cell: Cell
    passives: tuple[Passive, ...]
    amplifier: Amplifier


def feedback_part(kind: str, value: float, rules: CellRules, sets: str) -> Passive:
    """A resistor or capacitor yet without reference and nets, for `inverting_cell`."""
    rule = rules.capacitors if kind == "capacitor" else rules.resistors
    return Passive(
        ref=kind[0].upper(),
        kind=kind,
        nets=("", ""),
        value=value,
        ideal=value,
        rule=rule,
        sets=sets,
    )


def inverting_cell(
    numbering: Numbering,
    *,
    kind: str,
    block: str,
    output: str,
    summing: str,
    inputs: Sequence[CellInput],
    feedback: Passive,
    rules: CellRules,
    polarity: int,
    plus: str = GROUND,
    balance: Passive | None = None,
) -> BuiltCell:
    """Input resistors into a summing node, an op-amp with + at ground, and a feedback part.

    `feedback` comes with value, rule and provenance; its reference and nets are set here.  With
    another net `plus` at the non-inverting input, the inputs marked so go there; `balance` is a
    resistor to ground that comes with its nets.
    """
    resistors = tuple(
        Passive(
            ref=numbering.next("R"),
            kind="resistor",
            nets=(each.net, plus if each.at_plus else summing),
            value=each.resistance,
            ideal=each.resistance,
            rule=rules.resistors,
            sets=each.sets,
        )
        for each in inputs
    )
    legs = (replace(balance, ref=numbering.next("R")),) if balance else ()
    letter = "C" if feedback.kind == "capacitor" else "R"
    closing = replace(feedback, ref=numbering.next(letter), nets=(summing, output))
    amplifier = Amplifier(
        ref=numbering.next("U"),
        plus=plus,
        minus=summing,
        output=output,
        figures=rules.op_amp,
        sets=f"{kind} {block}",
    )
    cell = Cell(
        kind=kind,
        block=block,
        amplifier=amplifier.ref,
        inputs=tuple(r.ref for r in resistors),
        feedback=closing.ref,
        summing=summing,
        output=output,
        polarity=polarity,
        plus=plus,
        balance=legs[0].ref if legs else "",
    )
    return BuiltCell(cell, (*resistors, *legs, closing), amplifier)
