"""What an earlier design is to do without: the request, and whether it fits the design.

Called by `synth.repicking`.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass, replace

from synth.circuit import Circuit, Passive
from synth.errors import JobError
from synth.job import Job
from synth.recorded import Earlier
from synth.shortages import Shortage

__all__ = ["Request", "checked_request", "limited"]


@dataclass(frozen=True, kw_only=True)
class Request:
    """What cannot be had, and what must stay.

    Parameters
    ----------
    shortages
        At least one; one for a whole series does not concern parts in `bought`.
    bought
        References that must keep their values.
    all_free
        Whether every part not in `bought` is free from the start.
    """

    shortages: tuple[Shortage, ...]
    bought: tuple[str, ...] = ()
    all_free: bool = False


def checked_request(circuit: Circuit, job: Job, earlier: Earlier, request: Request) -> Request:
    """The request with the shortages of earlier times, once it is known to fit the circuit."""
    own = {p.ref: p for p in circuit.bought}
    for ref in (*request.bought, *(s.ref for s in request.shortages if s.ref)):
        if ref not in own:
            known = ", ".join(own)
            raise JobError(f"got the part {ref!r}, expected one of {known}")
    fixed = {p.ref for p in circuit.bought if p.fixed} | {ref for ref, _ in job.board.fixed}
    for shortage in request.shortages:
        hit = [p for p in circuit.bought if shortage.hits(p)]
        if shortage.ref and not hit:
            has = replace(shortage, value=own[shortage.ref].value)
            raise JobError(f"got {shortage.text}, but the design has {has.text}")
        if not hit:
            raise JobError(f"got {shortage.text}, but no part of the design has that value")
        for part in hit:
            if part.ref in fixed:
                raise JobError(f"got {shortage.text}, but the job fixes the value of {part.ref}")
        if all(p.ref in request.bought for p in hit):
            refs = ", ".join(p.ref for p in hit)
            raise JobError(f"got {shortage.text}, but what has that value is bought: {refs}")
    every = tuple(dict.fromkeys((*earlier.shortages, *request.shortages)))
    for part in circuit.bought:
        limited(part, every)
    return replace(request, shortages=every)


def limited(part: Passive, shortages: Collection[Shortage]) -> Passive:
    """`part` with a rule that has none of the values that cannot be had."""
    if part.rule is None or part.fixed:
        return part
    values = part.rule.values
    out = tuple(
        float(v)
        for v in values
        if any(s.concerns(part) and s.is_value(float(v)) for s in shortages)
    )
    if len(out) == values.size:
        said = ", ".join(s.text for s in shortages if s.concerns(part))
        raise JobError(
            f"{part.ref}: without {said} no value of {part.rule.source} is left in its range"
        )
    return replace(part, rule=replace(part.rule, without=out)) if out else part
