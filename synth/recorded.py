"""An earlier design as it was recorded: its job, and the circuit of that at recorded values."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from synth.choosing.pairs import Pair, with_pairs
from synth.circuit import Circuit
from synth.errors import JobError
from synth.job import Job
from synth.quantities import show, what_came
from synth.shortages import SAME_VALUE, Shortage

__all__ = ["Earlier", "RecordedPart", "paired", "rebuilt", "recorded_pairs"]


@dataclass(frozen=True, kw_only=True)
class RecordedPart:
    """A resistor or capacitor of an earlier design: `value` [ohm] or [F]; `place` is where in the
    record it stands."""

    ref: str
    kind: str
    nets: tuple[str, str]
    value: float
    place: str = ""


@dataclass(frozen=True, kw_only=True)
class Earlier:
    """An earlier design, as much of it as is needed to make it again.

    `boards` and `seed` are those of its tolerance run, of which `passed` were within the limits,
    None where that is not known; `shortages` what it had to do without; `name` is that of the
    record in messages.
    """

    job: Job
    form: str
    parts: tuple[RecordedPart, ...]
    boards: int
    seed: int
    shortages: tuple[Shortage, ...] = ()
    name: str = ""
    passed: int | None = None

    @property
    def share(self) -> float | None:
        """Share of its boards within the limits, a ratio; None where it is not known."""
        return None if self.passed is None else self.passed / self.boards


def paired(circuit: Circuit, parts: Sequence[RecordedPart]) -> Circuit:
    """`circuit` with two resistors for one wherever `parts` have them."""
    return with_pairs(circuit, recorded_pairs(circuit, parts))


def recorded_pairs(circuit: Circuit, parts: Sequence[RecordedPart]) -> tuple[Pair, ...]:
    """The pairs of resistors that `parts` have for one of `circuit`.

    R4A and R4B stand for an input resistor R4 that is not recorded itself: in parallel where
    both have the same nets, in series otherwise.  Whether everything fits is for `rebuilt` to
    say.
    """
    found = {p.ref: p for p in parts}
    inputs = {ref for cell in circuit.cells for ref in cell.inputs}
    pairs: list[Pair] = []
    for part in circuit.bought:
        first, second = found.get(f"{part.ref}A"), found.get(f"{part.ref}B")
        if first is None or second is None or part.ref in found:
            continue
        if part.ref in inputs and not part.fixed:
            how = "parallel" if first.nets == second.nets else "series"
            pairs.append(Pair(ref=part.ref, values=(first.value, second.value), how=how))
    return tuple(pairs)


def rebuilt(circuit: Circuit, parts: Sequence[RecordedPart], *, name: str = "") -> Circuit:
    """`circuit` with the values of `parts`, once both are known to be the same circuit.

    Parameters
    ----------
    name
        Of the record, in messages.

    Raises
    ------
    JobError
        A part that the job's circuit does not have, or that differs in kind, nets or in what
        values it may take; or one that is not recorded.
    """
    found, own = {p.ref: p for p in parts}, {p.ref: p for p in circuit.bought}
    for record in parts:
        if record.ref not in own:
            problem = f"got {what_came(record.ref)}, expected one of {', '.join(own)}"
            raise _damage(name, record, "ref", problem)
    for ref in own:
        if ref not in found:
            raise JobError(
                _said(name, "components", f"{ref} is missing, which the job's circuit has")
            )
    for part in circuit.bought:
        record = found[part.ref]
        for what in ("kind", "nets"):
            came, expected = _plain(getattr(record, what)), _plain(getattr(part, what))
            if came != expected:
                raise _damage(
                    name, record, what, f"{part.ref} has {came}, expected {expected} as in the job"
                )
        if part.rule is not None and not part.fixed:
            values = part.rule.values
            if not np.any(np.isclose(values, record.value, rtol=SAME_VALUE, atol=0)):
                unit = "ohm" if part.kind == "resistor" else "F"
                came, low, high = (show(v, unit, 6) for v in (record.value, values[0], values[-1]))
                source = part.rule.source
                problem = f"{part.ref} has {came}, expected one of {source} from {low} to {high}"
                raise _damage(name, record, "value", problem)
    at = circuit.with_values({p.ref: p.value for p in parts})
    return replace(at, passives=tuple(replace(p, ideal=p.value) for p in at.passives))


def _plain(value: object) -> str:
    return what_came(" ".join(value) if isinstance(value, tuple) else value)


def _damage(name: str, part: RecordedPart, key: str, problem: str) -> JobError:
    """What is wrong with the key of a recorded part."""
    return JobError(_said(name, f"{part.place or part.ref}.{key}", problem))


def _said(name: str, path: str, problem: str) -> str:
    return ": ".join(each for each in (name, path, problem) if each)
