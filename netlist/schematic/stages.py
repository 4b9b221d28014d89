r"""The stage: one op-amp, a feedback part to its inverting input, input resistors.

Summing integrators, summing amplifiers and inverters are all this stage; they differ in the
feedback part and in the caption.  Its own origin lies where the summing bus crosses the line
of the op-amp's output::

                  feedback
            +------[   ]------+
            |                 |
            +----- -\         |
    -[ R ]--+        >--------+---- output, y = 0
    -[ R ]--+   +- +/
    -[ R ]--+   |
               ground

The first resistor lies on the line of the output, so that a chain of stages is a straight
line; the others hang below it at a constant pitch.  Two in series lie in line.

A difference stage has a second bus, at its other input, to the right of the first; the resistor
that balances the two inputs hangs lowest, with its own ground.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType

from netlist.schematic import lettering
from netlist.schematic.geometry import Box, Point, Sheet, Symbol, Text
from synth.circuit import GROUND, Amplifier, Branch, Cell, Circuit, Passive

__all__ = [
    "PITCH",
    "STAGES",
    "TEE",
    "Stage",
    "balance_length",
    "branch_length",
    "draw_ground",
    "draw_resistor",
    "resistor_length",
]

PITCH = 30.0  # from one input resistor to the next
TEE = 105.0  # where the feedback meets the output
_MINUS, _PLUS = -15.0, 15.0  # the inputs
_BACK, _TIP = 30.0, 90.0  # the op-amp
_OVER = -50.0  # the feedback part
_GROUND_X = 16.0
_CAPTION = 42.0  # baseline
_SMALL = 8.0
_BODY = (30.0, 10.0)  # resistor
_PLATES = (6.0, 20.0)  # capacitor: gap, height


@dataclass(frozen=True)
class Stage:
    """How one kind of cell is drawn.

    Parameters
    ----------
    draw
        ``draw(sheet, circuit, cell, at, stack=..., lead=..., main=...)``.
    caption
        Words under the op-amp, with the signal its output carries.
    """

    draw: Callable[..., None]
    caption: Callable[[Cell], str]
    above: float = 76.0

    def below(self, cell: Cell) -> float:
        """How far it reaches below its output line [px]."""
        rows = len(cell.inputs) + bool(cell.balance)
        return max(_CAPTION + 4, (rows - 1) * PITCH + (12 if cell.balance else 8))

    def right(self, cell: Cell) -> float:
        """Where the caption ends [px]."""
        return _BACK + lettering.width(self.caption(cell), _SMALL)


def resistor_length(part: Passive) -> float:
    """Length of a lying resistor with its leads, so that its label fits between its ends."""
    w = lettering.width(_label(part), 10.0)
    return 10.0 * max(6, int((w + 8) / 10) + 1)


def branch_length(branch: Branch) -> float:
    """Length of the resistors of one input in line."""
    return sum(resistor_length(part) for part in branch.parts)


def balance_length(circuit: Circuit, cell: Cell) -> float:
    """Length that the resistor which balances a cell takes up, with its ground; 0 for none."""
    return resistor_length(circuit.by_ref[cell.balance]) + 10 if cell.balance else 0.0


def draw_resistor(
    sheet: Sheet,
    part: Passive,
    left: Point,
    length: float,
    nets: tuple[str, str],
    *,
    heavy: bool,
    tail: float = 0.0,
) -> None:
    """A lying resistor with leads from `left` over `length`, the right one longer by `tail`;
    `nets` from left to right."""
    x, y = left
    middle = x + length / 2
    half, _ = _half_size(part)
    _lying(sheet, part, (middle, y))
    sheet.wire(nets[0], left, (middle - half, y), heavy=heavy)
    sheet.wire(nets[1], (middle + half, y), (x + length + tail, y), heavy=heavy)


def draw_ground(sheet: Sheet, at: Point) -> None:
    """A ground symbol hanging from `at`."""
    x, y = at
    sheet.symbols.append(Symbol("ground", "", at, Box(x - 8, y, x + 8, y + 8), (("0", at),)))


def _lying(sheet: Sheet, part: Passive, at: Point) -> None:
    """A resistor or capacitor on a horizontal line, its label above."""
    x, y = at
    half, rise = _half_size(part)
    pins = (("1", (x - half, y)), ("2", (x + half, y)))
    box = Box(x - half, y - rise, x + half, y + rise)
    dashed = not part.on_board
    sheet.symbols.append(
        Symbol(part.kind, part.ref, at, box, pins, dashed=dashed, hint=_hint(part))
    )
    sheet.texts.append(Text((x, y - rise - 3), _label(part), side="middle"))


def _label(part: Passive) -> str:
    return f"{part.ref} {lettering.value_text(part)}"


def _hint(part: Passive) -> str:
    rule = f", {part.source} {100 * part.tolerance:g} %" if part.on_board else ""
    return f"{_label(part)}{rule}" + (f": sets {part.sets}" if part.sets else "")


def _draw_stage(
    sheet: Sheet,
    circuit: Circuit,
    cell: Cell,
    at: Point,
    *,
    stack: Sequence[str],
    lead: float,
    main: str,
) -> None:
    r"""The stage with its bus at `at`.

    `stack` are the input resistors from top to bottom, `lead` the length of each, `main` the
    one on the main path or ``""``.  The output ends at the feedback tee.
    """
    x, y = at
    rows: dict[str, list[float]] = {cell.summing: [], cell.plus: []}
    entry: dict[str, float] = {}
    # The bus at the other input stands right of the first, which the wires to it may cross.
    tail = {cell.plus: _GROUND_X, cell.summing: 0.0}
    for k, ref in enumerate(stack):
        branch, node = circuit.branch(cell, ref), cell.node_of(circuit.by_ref[ref])
        row = y + k * PITCH
        _draw_branch(sheet, branch, (x, row), lead, node, heavy=ref == main, tail=tail[node])
        rows[node].append(row)
        if ref == main:
            entry[node] = row
    if cell.balance:
        part, row = circuit.by_ref[cell.balance], y + len(stack) * PITCH
        node = cell.node_of(part)
        _draw_leg(sheet, part, (x, row), node, tail=tail[node])
        rows[node].append(row)
    last = max(rows[cell.summing], default=y + _MINUS)
    _draw_bus(sheet, cell, at, last, entry.get(cell.summing))
    _draw_plus(sheet, cell, at, rows[cell.plus], entry.get(cell.plus))
    _draw_feedback(sheet, circuit.by_ref[cell.feedback], cell, at)
    amplifier = next(a for a in circuit.amplifiers if a.ref == cell.amplifier)
    _draw_op_amp(sheet, amplifier, (x + _BACK, y), STAGES[cell.kind].caption(cell))
    sheet.wire(cell.output, (x + _TIP, y), (x + TEE, y), heavy=bool(main))


def _draw_feedback(sheet: Sheet, part: Passive, cell: Cell, at: Point) -> None:
    """The part above the op-amp, from the bus to the tee at the output."""
    x, y = at
    top, middle = y + _OVER, x + TEE / 2
    half, _ = _half_size(part)
    _lying(sheet, part, (middle, top))
    sheet.wire(cell.summing, (x, top), (middle - half, top))
    sheet.wire(cell.output, (middle + half, top), (x + TEE, top), (x + TEE, y))


def _draw_leg(sheet: Sheet, part: Passive, right: Point, node: str, *, tail: float) -> None:
    """A resistor from a bus to a ground of its own."""
    length = resistor_length(part)
    left = (right[0] - length, right[1])
    draw_resistor(sheet, part, left, length, (GROUND, node), heavy=False, tail=tail)
    draw_ground(sheet, left)


def _draw_plus(
    sheet: Sheet, cell: Cell, at: Point, rows: Sequence[float], entry: float | None
) -> None:
    """What the non-inverting input hangs on: ground, or the bus of the resistors at `rows`."""
    x, y = at[0] + _GROUND_X, at[1] + _PLUS
    sheet.wire(cell.plus, (at[0] + _BACK, y), (x, y), heavy=entry is not None)
    if not rows:
        sheet.wire(cell.plus, (x, y), (x, y + 7))
        draw_ground(sheet, (x, y + 7))
        return
    for side in ([r for r in rows if r < y], [r for r in rows if r > y]):
        end = y
        if entry in side:
            sheet.wire(cell.plus, (x, y), (x, entry), heavy=True)
            end = entry
        far = max(side, key=lambda r: abs(r - y), default=y)
        if far != end:
            sheet.wire(cell.plus, (x, end), (x, far))


def _draw_branch(
    sheet: Sheet,
    branch: Branch,
    right: Point,
    lead: float,
    summing: str,
    *,
    heavy: bool,
    tail: float,
) -> None:
    """The resistors of one input in line, over `lead` to `right`; the first takes the slack."""
    x, y = right
    net = summing
    for k, part in reversed(list(enumerate(branch.parts))):
        length = resistor_length(part) if k else x - right[0] + lead
        far = part.nets[1] if part.nets[0] == net else part.nets[0]
        x -= length
        draw_resistor(sheet, part, (x, y), length, (far, net), heavy=heavy, tail=tail)
        net, tail = far, 0.0


def _draw_bus(sheet: Sheet, cell: Cell, at: Point, last: float, entry: float | None) -> None:
    """The summing bus; from `entry`, where the main path comes in, to the op-amp it is heavy."""
    x, y = at
    minus = y + _MINUS
    sheet.wire(cell.summing, (x, minus), (x + _BACK, minus), heavy=entry is not None)
    sheet.wire(cell.summing, (x, y + _OVER), (x, minus))
    if entry is None:
        sheet.wire(cell.summing, (x, minus), (x, last))
    else:
        sheet.wire(cell.summing, (x, minus), (x, entry), heavy=True)
        sheet.wire(cell.summing, (x, entry), (x, last))


def _half_size(part: Passive) -> tuple[float, float]:
    """Half the length and half the height of a lying symbol."""
    length, height = _BODY if part.kind == "resistor" else _PLATES
    return length / 2, height / 2


def _draw_op_amp(sheet: Sheet, amplifier: Amplifier, back: Point, caption: str) -> None:
    """The triangle; the reference inside where it fits, else before the caption."""
    x, y = back
    pins = (
        ("-", (x, y + _MINUS)),
        ("+", (x, y + _PLUS)),
        ("out", (x + _TIP - _BACK, y)),
    )
    box = Box(x, y - 30, x + _TIP - _BACK, y + 30)
    f = amplifier.figures
    hint = f"{amplifier.ref} {f.kind}" + (f": {amplifier.sets}" if amplifier.sets else "")
    sheet.symbols.append(Symbol("op_amp", amplifier.ref, back, box, pins, hint=hint))
    if _fits(amplifier.ref):
        sheet.texts.append(Text((x + 23, y + 3.6), amplifier.ref, bold=True, side="middle"))
    sheet.texts.append(Text((x, y + _CAPTION), caption, _SMALL, tone="faint"))


def _fits(ref: str) -> bool:
    """Whether a reference fits into the op-amp."""
    return lettering.width(ref, 10.0, bold=True) <= 32


def _caption(cell: Cell) -> str:
    """What the cell is and the signal its output carries; the reference if it stands nowhere
    else."""
    signal = ("" if cell.polarity > 0 else "−") + cell.block
    ref = "" if _fits(cell.amplifier) else f"{cell.amplifier} "
    return f"{ref}{cell.kind}: {signal}"


_STAGE = Stage(_draw_stage, _caption)
STAGES: Mapping[str, Stage] = MappingProxyType(
    {"integrator": _STAGE, "adder": _STAGE, "inverter": _STAGE, "difference": _STAGE}
)
"""How each kind of cell is drawn."""
