"""Circuits: parts between nets, grouped into cells, each part knowing what it sets.

Net ``0`` is ground, ``in`` the source, ``out`` the output.  With a source resistance the
cells hang on net ``src`` behind it.  An op-amp output bears the name of its block, its
summing node the same with ``_s``; an inverter of block b drives ``b_n``.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from functools import cached_property

from synth.errors import CircuitError
from synth.parts import OpAmp, PartRule

__all__ = ["GROUND", "Amplifier", "Branch", "Cell", "Circuit", "Passive"]

GROUND = "0"
_REFERENCE = re.compile(r"[A-Z][A-Z0-9_]{0,15}")
_NET = re.compile(r"0|[a-z][a-z0-9_]{0,30}")


@dataclass(frozen=True, kw_only=True)
class Passive:
    """A resistor or a capacitor.

    Parameters
    ----------
    ref
        Reference such as ``"R7"``.
    kind
        ``"resistor"`` or ``"capacitor"``.
    nets
        The two nets it joins.
    value
        [ohm] or [F].
    ideal
        Value the mathematics asks for, before a standard one was taken.
    rule
        What may be bought; None for what is not a part of the board (the resistance of
        the source, the load), which then has no tolerance either.
    sets
        What the part sets, in words.
    fixed
        Whether the job states the value.
    grade
        Relative tolerance of this very part, where the stock holds its value in several; None:
        that of the rule.
    """

    ref: str
    kind: str
    nets: tuple[str, str]
    value: float
    ideal: float
    rule: PartRule | None
    sets: str = ""
    fixed: bool = False
    grade: float | None = None

    @property
    def tolerance(self) -> float:
        """Relative tolerance, 0 for what is not on the board."""
        if self.grade is not None:
            return self.grade
        return self.rule.tolerance_of(self.value) if self.rule else 0.0

    @property
    def source(self) -> str:
        """Where the value comes from: a series, ``"stock"``, ``"fixed"`` for one stated in the
        job that is of no such series; ``""`` for what is not on the board."""
        if self.rule is None:
            return ""
        stray = self.fixed and not bool((self.rule.values == self.value).any())
        return "fixed" if stray else self.rule.source

    @property
    def on_board(self) -> bool:
        """Whether the part is bought and placed."""
        return self.rule is not None


@dataclass(frozen=True, kw_only=True)
class Amplifier:
    """An op-amp: nets of its inputs and output, and its figures."""

    ref: str
    plus: str
    minus: str
    output: str
    figures: OpAmp
    sets: str = ""


@dataclass(frozen=True, kw_only=True)
class Cell:
    """A group of parts that realises one block.

    Parameters
    ----------
    kind
        ``"integrator"``, ``"adder"``, ``"inverter"`` or ``"difference"``: inverting summing
        integrator, inverting summing amplifier, inverter, summing amplifier that uses both inputs
        of its op-amp.
    block
        The block it realises (of an inverter: the block it inverts, or ``"in"``).
    amplifier
        Reference of the op-amp.
    inputs
        References of the input resistors, from their source nets to `summing`, or to `plus`.
    feedback
        Reference of the part from `output` to `summing`.
    series
        Pairs of references: an input resistor that is one of two in series, and the other,
        which joins it to its source net through a net of their own.
    summing, output
        Nets.
    polarity
        +1 when the output net carries the signal of the block, -1 when it carries its
        negative.
    plus
        Net of the op-amp's non-inverting input.
    balance
        Reference of the resistor from one of the inputs to ground with which the gains come out
        right, ``""`` for none.
    """

    kind: str
    block: str
    amplifier: str
    inputs: tuple[str, ...]
    feedback: str
    summing: str
    output: str
    polarity: int
    series: tuple[tuple[str, str], ...] = ()
    plus: str = GROUND
    balance: str = ""

    @property
    def refs(self) -> tuple[str, ...]:
        """References of its resistors and capacitors."""
        behind = (ref for _, ref in self.series)
        return (*self.inputs, *behind, *((self.balance,) if self.balance else ()), self.feedback)

    def node_of(self, part: Passive) -> str:
        """The input of the op-amp that an input resistor, or the balancing one, goes to."""
        return self.plus if self.plus != GROUND and self.plus in part.nets else self.summing


@dataclass(frozen=True)
class Branch:
    """What joins a source net to a summing node: resistors in series, from the source on, and
    their resistance [ohm]."""

    net: str
    parts: tuple[Passive, ...]

    @property
    def resistance(self) -> float:
        """Of all together."""
        return sum(part.value for part in self.parts)


@dataclass(frozen=True, kw_only=True)
class Circuit:
    """A whole circuit, driven by 1 V at net ``in``.

    Attributes
    ----------
    passives
        Resistors and capacitors, those of the source and the load included.
    amplifiers
        Op-amps.
    cells
        The cells, in signal-flow order; may be empty for a circuit not made from blocks.

    Raises
    ------
    CircuitError
        A reference used twice, a name that is not allowed, a net with one connection, an
        op-amp output driven twice, an unknown reference in a cell.
    """

    passives: tuple[Passive, ...]
    amplifiers: tuple[Amplifier, ...]
    cells: tuple[Cell, ...] = ()
    input_net: str = "in"
    output_net: str = "out"

    def __post_init__(self) -> None:
        self._check_names()
        self._check_nets()
        for cell in self.cells:
            for ref in cell.refs:
                if ref not in self.by_ref:
                    raise CircuitError(f"cell {cell.block}: unknown part {ref!r}")
            for ref, behind in cell.series:
                self._check_series(cell, ref, behind)

    def _check_names(self) -> None:
        refs = [p.ref for p in self.passives] + [a.ref for a in self.amplifiers]
        for ref in refs:
            if not _REFERENCE.fullmatch(ref):
                raise CircuitError(f"got the reference {ref!r}, expected one such as 'R7'")
        if len(set(refs)) != len(refs):
            twice = sorted({r for r in refs if refs.count(r) > 1})
            raise CircuitError(f"references used twice: {', '.join(twice)}")
        for net in self.connections:
            if not _NET.fullmatch(net):
                raise CircuitError(f"got the net name {net!r}")
        for part in self.passives:
            if not 0 < part.value < float("inf"):
                raise CircuitError(f"{part.ref}: got {part.value}, expected a positive value")

    def _check_nets(self) -> None:
        for net in (self.input_net, self.output_net):
            if net not in self.connections:
                raise CircuitError(f"nothing is connected to net {net!r}")
        for net, refs in self.connections.items():
            if len(refs) < 2 and net not in (GROUND, self.input_net, self.output_net):
                raise CircuitError(f"net {net!r} hangs on {refs[0]} alone")
        outputs = [a.output for a in self.amplifiers]
        driven = [*outputs, self.input_net, GROUND]
        for net in set(driven):
            if driven.count(net) > 1:
                raise CircuitError(f"net {net!r} is driven twice")

    def _check_series(self, cell: Cell, ref: str, behind: str) -> None:
        """Two in series have a net of their own between them, and nothing else is on it."""
        middle = _far_net(self.by_ref[ref], cell.node_of(self.by_ref[ref]))
        if ref not in cell.inputs or set(self.connections[middle]) != {ref, behind}:
            raise CircuitError(
                f"cell {cell.block}: got {behind} and {ref} in series, expected an input "
                "resistor and one more, with a net of their own between them"
            )

    @cached_property
    def connections(self) -> dict[str, tuple[str, ...]]:
        """References on each net."""
        out: dict[str, list[str]] = {}
        for part in self.passives:
            for net in part.nets:
                out.setdefault(net, []).append(part.ref)
        for amp in self.amplifiers:
            for net in (amp.plus, amp.minus, amp.output):
                out.setdefault(net, []).append(amp.ref)
        return {net: tuple(refs) for net, refs in out.items()}

    @cached_property
    def by_ref(self) -> dict[str, Passive]:
        """Passives by reference."""
        return {p.ref: p for p in self.passives}

    @property
    def bought(self) -> tuple[Passive, ...]:
        """Resistors and capacitors that are parts of the board."""
        return tuple(p for p in self.passives if p.on_board)

    def cell_of(self, ref: str) -> Cell | None:
        """The cell a part or op-amp belongs to."""
        for cell in self.cells:
            if ref == cell.amplifier or ref in cell.refs:
                return cell
        return None

    def branch(self, cell: Cell, ref: str) -> Branch:
        """The input resistor `ref` of a cell with what is in series with it."""
        part = self.by_ref[ref]
        net = _far_net(part, cell.node_of(part))
        behind = dict(cell.series).get(ref)
        if behind is None:
            return Branch(net, (part,))
        first = self.by_ref[behind]
        return Branch(_far_net(first, net), (first, part))

    def branches(self) -> Iterator[Branch]:
        """Every input of every cell."""
        return (self.branch(cell, ref) for cell in self.cells for ref in cell.inputs)

    def signal_nets(self) -> Iterator[str]:
        """Nets of the op-amp outputs, in order of the op-amps."""
        return (a.output for a in self.amplifiers)

    def with_values(self, values: Mapping[str, float]) -> Circuit:
        """The same circuit with some values changed.

        Raises
        ------
        CircuitError
            An unknown reference.
        """
        unknown = values.keys() - self.by_ref.keys()
        if unknown:
            raise CircuitError(f"unknown parts: {', '.join(sorted(unknown))}")
        return replace(
            self,
            passives=tuple(
                replace(p, value=float(values[p.ref]), grade=None) if p.ref in values else p
                for p in self.passives
            ),
        )


def _far_net(part: Passive, near: str) -> str:
    return part.nets[1] if part.nets[0] == near else part.nets[0]
