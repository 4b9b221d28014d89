"""An earlier design as it was recorded: its job, and the circuit of that at recorded values."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from synth.choosing.pairs import Pair, with_pairs
from synth.circuit import Circuit
from synth.errors import JobError
from synth.job import Job
from synth.shortages import SAME_VALUE, Shortage

__all__ = ["Earlier", "RecordedPart", "paired", "rebuilt"]


@dataclass(frozen=True, kw_only=True)
class RecordedPart:
    """A resistor or capacitor of an earlier design: `value` [ohm] or [F]."""

    ref: str
    kind: str
    nets: tuple[str, str]
    value: float


@dataclass(frozen=True, kw_only=True)
class Earlier:
    """An earlier design, as much of it as is needed to make it again.

    `boards` and `seed` are those of its tolerance run; `shortages` what it had to do without.
    """

    job: Job
    form: str
    parts: tuple[RecordedPart, ...]
    boards: int
    seed: int
    shortages: tuple[Shortage, ...] = ()


def paired(circuit: Circuit, parts: Sequence[RecordedPart]) -> Circuit:
    """`circuit` with two resistors for one wherever `parts` have them.

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
    return with_pairs(circuit, tuple(pairs))


def rebuilt(circuit: Circuit, parts: Sequence[RecordedPart]) -> Circuit:
    """`circuit` with the values of `parts`, once both are known to be the same circuit.

    Raises
    ------
    JobError
        A part that the job's circuit does not have, or that differs in kind, nets or in what
        values it may take; or one that is not recorded.
    """
    found = {p.ref: p for p in parts}
    extra = [p.ref for p in parts if p.ref not in {q.ref for q in circuit.bought}]
    lost = [p.ref for p in circuit.bought if p.ref not in found]
    for refs, problem in ((extra, "is not in"), (lost, "is missing, but in")):
        if refs:
            raise JobError(f"{refs[0]} {problem} the circuit of the job")
    for part in circuit.bought:
        record = found[part.ref]
        for name in ("kind", "nets"):
            if getattr(record, name) != getattr(part, name):
                raise JobError(
                    f"{part.ref}: got {name} {_plain(getattr(record, name))}, but the circuit of "
                    f"the job has {_plain(getattr(part, name))}"
                )
        if part.rule is not None and not part.fixed:
            values = part.rule.values
            if not np.any(np.isclose(values, record.value, rtol=SAME_VALUE, atol=0)):
                raise JobError(
                    f"{part.ref}: got the value {record.value:g}, expected one of "
                    f"{part.rule.source} from {values[0]:g} to {values[-1]:g}"
                )
    at = circuit.with_values({p.ref: p.value for p in parts})
    return replace(at, passives=tuple(replace(p, ideal=p.value) for p in at.passives))


def _plain(value: object) -> str:
    return " ".join(value) if isinstance(value, tuple) else str(value)
