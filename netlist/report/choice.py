"""What is known of the choice of values, ready for the page: how good any choice could be, what
it brings to choose for the op-amps there are, and the error budget."""

from __future__ import annotations

from netlist.report.wording import decibel, listed, percent, quantity, stated
from synth.choosing.certificate import PROVEN_RATIO, Certificate
from synth.circuit import Circuit
from synth.results import (
    Design,
    ErrorBudget,
    ErrorFigures,
    OpAmpAllowance,
    SpreadShare,
    Tightened,
)

__all__ = [
    "allowance_rows",
    "binding_lines",
    "budget_lines",
    "budget_rows",
    "proof_line",
    "shown",
]

Row = dict[str, object]

# Beyond this many times its bound an error is called unknown against the best, not close to it.
USEFUL_RATIO = 2.0

# Lines of the table of shares, and the least share of the sets of parts that bind, against
# the bound, that is worth a line.
LARGEST_SHARES = 8
WORTH_NAMING = 0.5

# Smaller shares of the variance are not put in digits.
WORTH_DIGITS = 0.001

# References of parts that were no choice, or else of those that were, are listed up to this many.
MOST_NAMED = 4

# What a choice is compared with.
_OTHERS = "choice of values on offer that keeps the levels and impedances"

_NOUNS = {"resistor": "all resistors", "capacitor": "all capacitors"}

# What spreads the boards.
_CAUSES = {
    "parts": "the parts at 25\N{NO-BREAK SPACE}\N{DEGREE SIGN}C",
    "temperature": "temperature",
    "op_amps": "the gain-bandwidth of the op-amps",
}
_SHARED = {
    "lot": "offset of their reel",
    "network": "deviation they share as matched parts",
    "temperature": "drift with temperature",
    "op_amp": "gain-bandwidth",
}


def proof_line(found: Certificate, circuit: Circuit) -> str:
    """How the choice stands against the best there could be, in a few sentences."""
    if found.unshared is not None:
        return _before_sharing(found, found.unshared) + _held(found, circuit)
    return _standing(found) + _held(found, circuit)


def _before_sharing(found: Certificate, unshared: Certificate) -> str:
    """Of the choice before values were shared, and what sharing them did to it."""
    return (
        f"Of the choice before values were shared: {_standing(unshared)} Values were shared "
        f"afterwards, so that fewer are bought, and the rms error went from "
        f"{percent(unshared.rms)} to {percent(found.rms)}; the bound is that of the unshared "
        "choice."
    )


def _held(found: Certificate, circuit: Circuit) -> str:
    """Among what the choice was, where it was not free; nothing where it was."""
    if not found.held:
        return ""
    if len(found.held) == 1:
        return f" All this is said of choices that leave {found.held[0]} as it is."
    if len(found.held) <= MOST_NAMED:
        return f" All this is said of choices that leave {listed(found.held)} as they are."
    free = [p.ref for p in circuit.bought if p.ref not in found.held]
    if 0 < len(free) <= MOST_NAMED:
        return (
            f" All this is said of choices of {listed(free)} that leave every other part as it is."
        )
    return f" All this is said of choices that leave {len(found.held)} parts as they are."


def _standing(found: Certificate) -> str:
    reached, bound = percent(found.rms), percent(found.lower_bound)
    proven = "Proven best in the linear model"
    if found.proven and found.exhausted:
        return (
            f"{proven}: its rms error is {reached}, and every other {_OTHERS} was tried or "
            "excluded by a bound."
        )
    if found.proven:
        return (
            f"{proven} to within {percent(PROVEN_RATIO, 1)}: its rms error is {reached}, and "
            f"no {_OTHERS} gets below {bound}."
        )
    if found.lower_bound * USEFUL_RATIO >= found.rms:
        above = percent(found.rms / found.lower_bound - 1, 2)
        return (
            f"At most {above} above the best any choice could be: its rms error is {reached}, "
            f"and no {_OTHERS} gets below {bound}."
        )
    return (
        f"Its rms error is {reached}; no {_OTHERS} gets below {bound}. Whether any lies between "
        "the two is not known."
    )


def binding_lines(found: Certificate, circuit: Circuit) -> list[str]:
    """Sets of parts that bind: what their values on offer leave undone on their own."""
    others = "all other parts that were free" if found.held else "all other parts"
    return [
        f"{listed(f'{ref} ({circuit.by_ref[ref].sets})' for ref in b.refs)}: whatever values "
        f"{others} had, those on offer for {'this part' if len(b.refs) == 1 else 'these'} "
        f"leave {percent(b.rms)}."
        for b in found.bottlenecks
        # A resistor that became a pair no longer binds under its own name.
        if b.rms >= WORTH_NAMING * found.lower_bound and circuit.by_ref.keys() >= set(b.refs)
    ][:3]


def allowance_rows(found: OpAmpAllowance) -> list[Row]:
    """Errors on the circuit with the job's op-amps."""

    def row(name: str, error: ErrorFigures) -> Row:
        return {
            "name": name,
            "rms": percent(error.rms),
            "db": decibel(error.largest_db),
            "deg": decibel(error.largest_deg),
        }

    off = "values as chosen, gain-bandwidth of all op-amps at {} times its figure"
    return [
        row("values as chosen, for the op-amps of the job", found.with_allowance),
        row("values chosen as if op-amps were ideal", found.without_allowance),
        row(off.format(f"{found.slower_factor:g}"), found.slower),
        row(off.format(f"{found.faster_factor:g}"), found.faster),
    ]


def budget_lines(found: ErrorBudget) -> list[str]:
    """Where the budget is tightest, how it divides there, what drives the spread, and what would
    help, in sentences."""
    unit, causes = found.unit, found.by_cause
    if _is_of_parts(found):
        spread = "part tolerance spreads"
    else:
        spread = f"{listed([_CAUSES[name] for name in causes])} spread"
    lines = [
        f"A limit is used up most by the {found.quantity} at "
        f"{quantity(found.frequency_hz, 'Hz')}, where {stated(found.limit, unit)} are allowed: "
        f"the nominal board is off by "
        f"{_with(abs(found.nominal), unit)}, and {spread} boards around it with a "
        f"standard deviation of {_with(found.spread, unit)}. Of the mean square error of a board "
        f"there, {_division(found)}."
    ]
    if not _is_of_parts(found):
        first, *others = [(_at_least(share), _CAUSES[name]) for name, share in causes.items()]
        due = [
            f"{first[0]} is due to {first[1]}",
            *(f"{share} to {name}" for share, name in others),
        ]
        lines.append(f"Of the variance over boards, {listed(due)}.")
    if found.part is None:
        lines.append("No part has a tighter grade that is commonly sold.")
    elif len(found.part.refs) > 1:
        lines.append(
            f"The parts whose tighter grade helps most are {listed(found.part.refs)}, which are "
            f"matched: {_gains(found.part, found)}."
        )
    else:
        lines.append(
            f"The part whose tighter grade helps most is {found.part.refs[0]}: "
            f"{_gains(found.part, found)}."
        )
    lines += [
        f"With {_NOUNS[t.kind]} at their next grade: {_gains(t, found)}."
        for t in found.kinds
        if len(t.refs) > 1
    ]
    return lines


def budget_rows(found: ErrorBudget, circuit: Circuit) -> list[Row]:
    """What has the largest shares of the variance, and the rest as one line."""
    rows = [_share_row(one, circuit) for one in found.shares[:LARGEST_SHARES]]
    rest = [one.share for one in found.shares[LARGEST_SHARES:]]
    if rest:
        name = f"{len(rest)} other{'' if len(rest) == 1 else 's'}"
        rows.append({"ref": name, "share": percent(sum(rest), 2), "tolerance": "", "sets": ""})
    return rows


def _share_row(one: SpreadShare, circuit: Circuit) -> Row:
    """One cause of the spread: a part, or what several have in common."""
    names = listed(one.refs) if one.refs else "all parts"
    tolerance, sets = "", _SHARED.get(one.cause, "")
    if one.cause == "own":
        part = circuit.by_ref[one.refs[0]]
        tolerance, sets = stated(part.tolerance, "%"), part.sets
    return {"ref": names, "share": percent(one.share, 2), "tolerance": tolerance, "sets": sets}


def _at_least(share: float) -> str:
    """A share in digits where it is worth any."""
    return percent(share, 2) if share >= WORTH_DIGITS else f"under {percent(WORTH_DIGITS, 1)}"


def _is_of_parts(found: ErrorBudget) -> bool:
    """Whether nothing but the tolerance of parts spreads the boards."""
    return set(found.by_cause) <= {"parts"}


def shown(design: Design) -> dict[str, object]:
    """Everything the page says of the choice; empty where nothing is known of it."""
    certificate, allowance, budget = design.certificate, design.allowance, design.budget
    return {
        "proof": proof_line(certificate, design.circuit) if certificate else "",
        "binding": binding_lines(certificate, design.circuit) if certificate else [],
        "allowance": allowance_rows(allowance) if allowance else [],
        "budget": budget_lines(budget) if budget else [],
        "shares": budget_rows(budget, design.circuit) if budget else [],
    }


def _division(found: ErrorBudget) -> str:
    """The smaller share in digits, the larger as the rest."""
    spread = "part tolerance" if _is_of_parts(found) else "the spread of boards"
    if found.values_share <= found.tolerance_share:
        share = percent(found.values_share, 2)
        return f"{share} is the choice of values and the rest {spread}"
    share = percent(found.tolerance_share, 2)
    return f"{share} is {spread} and the rest the choice of values"


def _gains(tighter: Tightened, found: ErrorBudget) -> str:
    return (
        f"from {stated(tighter.tolerance, '%')} to {stated(tighter.grade, '%')} the standard "
        f"deviation there falls to {_with(tighter.spread, found.unit)}, and on 95 of 100 boards "
        f"the largest magnitude error stays below {_with(tighter.error_95_db, 'dB')} instead of "
        f"{_with(found.error_95_db, 'dB')}"
    )


def _with(value: float, unit: str) -> str:
    return f"{decibel(value)}\N{NO-BREAK SPACE}{unit}"
