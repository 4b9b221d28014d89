"""An earlier design without some of its values: what is bought stays, the rest is chosen again.

The parts that cannot keep their values are free, all others keep theirs.  Where the limits are
met so, that is all; also where they are missed and freeing every part would hardly help.
Otherwise further parts are freed, resistors before capacitors, those first whose freedom lowers
the error most in the linear model of `synth.choosing`; in the end every freed part that can have
its old value back gets it.  A limit that the earlier design missed need only be kept about as
well as it did.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.candidates import Sketch, sketch_form
from synth.choosing import Choice
from synth.choosing.choose import DEFAULT_EFFORT, with_ideals
from synth.choosing.descent import Neighbourhood
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Goal, LinearModel, compensation
from synth.circuit import Circuit, Passive
from synth.design import judged_design
from synth.errors import JobError, RealizationError
from synth.evidence import ResponseError, response_error
from synth.grid import judging_frequencies
from synth.job import Job
from synth.limits import swings
from synth.nodal import compile_circuit
from synth.recorded import Earlier, paired, rebuilt
from synth.results import Design, ToleranceResult
from synth.shortages import Change, Repick, Shortage
from synth.tolerance import run_boards
from synth.values import level_ratios, standard_values, thinned, wanted_of

__all__ = ["Request", "repick"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Progress = Callable[[str, int, int], None]

# How many parts are freed in all, from one attempt to the next; then every one.
STEPS = (1, 2, 3, 4, 6, 8, 12, 16)

# Effort of a search with every part free; each request makes several.
EFFORT = DEFAULT_EFFORT // 2

# A nominal error up to this times the earlier one is as good; for the yield it is the lower end
# of the earlier interval.
AS_GOOD = 1.1


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


def repick(earlier: Earlier, request: Request, *, progress: Progress | None = None) -> Design:
    """The earlier design with other values where it must, and with what changed in `repick`.

    Raises
    ------
    JobError
        The earlier design does not fit its own job, or the request does not fit the design; one
        line says what.
    """
    say = progress or (lambda stage, done, total: None)
    job = replace(earlier.job, board=replace(earlier.job.board, form=earlier.form))
    frequency = judging_frequencies(job.target, job.signal.band_hz)
    say("rebuilding", 0, 1)
    sketch = sketch_form(job, job.board.form, frequency)
    drawn = paired(sketch.circuit, earlier.parts) if job.board.pairs else sketch.circuit
    circuit = rebuilt(drawn, earlier.parts)
    wanted = _checked_request(circuit, job, earlier, request)
    say("values", 0, 1)
    work = _Repicking(_at(sketch, circuit, frequency), job, earlier, wanted, frequency)
    choice = work.run()
    made = judged_design(
        job,
        sketch,
        (sketch.candidate,),
        choice,
        frequency,
        boards=earlier.boards,
        seed=earlier.seed,
        progress=say,
    )
    changes = tuple(
        Change(ref=p.ref, kind=p.kind, before=p.value, after=new.value, sets=p.sets)
        for p, new in zip(circuit.passives, choice.circuit.passives, strict=True)
        if p.value != new.value
    )
    changed = Repick(
        asked=request.shortages,
        earlier=earlier.shortages,
        bought=request.bought,
        all_free=request.all_free,
        missing=work.missing,
        changes=changes,
        before=work.before,
        after=made.nominal,
    )
    return replace(made, job=earlier.job, repick=changed)


def _at(sketch: Sketch, circuit: Circuit, frequency_hz: Real) -> Sketch:
    """The sketch with the values, and so at the levels, of `circuit`."""
    ratios = level_ratios(sketch, circuit, frequency_hz)
    return replace(
        sketch,
        circuit=circuit,
        graph=sketch.graph.rescaled(ratios),
        levels={name: v * ratios.get(name, 1.0) for name, v in sketch.levels.items()},
    )


def _checked_request(circuit: Circuit, job: Job, earlier: Earlier, request: Request) -> Request:
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
        _limited(part, every)
    return replace(request, shortages=every)


def _limited(part: Passive, shortages: Collection[Shortage]) -> Passive:
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


class _Repicking:
    """The search of one request; `before` is the error of the earlier design, `missing` the
    parts that must change."""

    def __init__(
        self, sketch: Sketch, job: Job, earlier: Earlier, request: Request, frequency_hz: Real
    ) -> None:
        self.sketch, self.job, self.earlier = sketch, job, earlier
        self.frequency_hz = frequency_hz
        self.wanted = wanted_of(sketch, job)
        self.response = self.wanted.response(frequency_hz)
        few = thinned(frequency_hz)
        self.goal = Goal.within(self.response[few], frequency_hz[few], job.accept)
        self.circuit = sketch.circuit
        self.shortages = request.shortages
        kept = {*request.bought, *(ref for ref, _ in job.board.fixed)}
        parts = [p for p in self.circuit.bought if p.ref not in kept and not p.fixed]
        self.missing = tuple(p.ref for p in parts if any(s.hits(p) for s in self.shortages))
        self.loose = tuple(p.ref for p in parts)
        self.all_free = request.all_free
        self.before = self._error(self.circuit)
        self.limits, self.share = self._limits()
        self.clipped = self._clipped(self.circuit)

    def run(self) -> Choice:
        """The best choice with the fewest parts freed."""
        if self.all_free:
            return self._restored(self._chosen(self.loose))
        if len(self.missing) == len(self.loose):
            return self._restored(self._chosen(self.loose))
        least = self._possible(self.missing)
        if least is not None and self._meets(least.circuit):
            return self._restored(least)
        most = self._chosen(self.loose)
        if least is None:
            return self._restored(self._fewest(most) if self._meets(most.circuit) else most)
        if not self._meets(most.circuit):
            reached = [self._share_of_limits(c.circuit) for c in (least, most)]
            return self._restored(least if reached[0] <= AS_GOOD * reached[1] else most)
        return self._restored(self._fewest(self._first_that_meets(least, most)))

    def _first_that_meets(self, least: Choice, most: Choice) -> Choice:
        """The choice with ever more parts freed, from `least` on, until the limits are met, as
        they are in `most`."""
        choice = least
        order: list[str] = []
        for count in (n for n in STEPS if len(self.missing) + n < len(self.loose)):
            while len(order) < count:
                order.append(self._most_helpful([*self.missing, *order], choice.circuit))
            choice = self._chosen([*self.missing, *order])
            if self._meets(choice.circuit):
                return choice
        return most

    def _fewest(self, choice: Choice) -> Choice:
        """With old values back wherever the limits are met all the same."""
        for ref in reversed(self._changed(choice)):
            changed = self._changed(choice)
            if ref in self.missing or ref not in changed:
                continue
            without = self._possible([*self.missing, *(r for r in changed if r != ref)])
            if without is not None and self._meets(without.circuit):
                choice = without
        return choice

    def _changed(self, choice: Choice) -> list[str]:
        new = choice.circuit.by_ref
        return [ref for ref in self.loose if new[ref].value != self.circuit.by_ref[ref].value]

    def _limits(self) -> tuple[tuple[float, float], float | None]:
        """Magnitude [dB], phase [deg] and share of boards that count as met."""
        accept, error = self.job.accept, self.before

        def limit(stated: float, reached: float) -> float:
            return stated if reached <= stated else reached * AS_GOOD

        share = accept.yield_share
        if share is not None:
            run = self._boards(self.circuit)
            share = share if run.share >= share else run.low
        limits = (
            limit(accept.magnitude_db, error.largest_db),
            limit(accept.phase_deg, error.largest_deg),
        )
        return limits, share

    def _open(self, free: Collection[str]) -> Circuit:
        """The circuit in which only the parts `free` have a choice."""
        return replace(
            self.circuit,
            passives=tuple(
                _limited(p, self.shortages) if p.ref in free else replace(p, fixed=True)
                for p in self.circuit.passives
            ),
        )

    def _chosen(self, free: Collection[str]) -> Choice:
        """The joint search over the parts `free`."""
        sketch = replace(self.sketch, circuit=self._open(free))
        share = len(free) / len(self.circuit.bought)
        return standard_values(
            sketch,
            self.job,
            self.response,
            self.frequency_hz,
            self.earlier.seed,
            effort=round(share * EFFORT),
        )

    def _possible(self, free: Collection[str]) -> Choice | None:
        """The same; None where the stock has nothing left for them beside what all others keep."""
        try:
            return self._chosen(free)
        except RealizationError:
            return None

    def _restored(self, choice: Choice) -> Choice:
        """`choice` with the rules of the job on every part, and the ideal values that follow."""
        pairs = zip(choice.circuit.passives, self.circuit.passives, strict=True)
        passives = tuple(replace(new, rule=old.rule, fixed=old.fixed) for new, old in pairs)
        circuit = replace(choice.circuit, passives=passives)
        return replace(choice, circuit=with_ideals(circuit, self.goal))

    def _most_helpful(self, free: Sequence[str], circuit: Circuit) -> str:
        """The part that lowers the error most when it is freed beside `free`."""
        candidates = [ref for ref in self.loose if ref not in free]
        resistors = [r for r in candidates if self.circuit.by_ref[r].kind == "resistor"]
        values = np.array([p.value for p in circuit.passives])
        model = LinearModel.about(compile_circuit(circuit), values, self.goal)
        costs = [self._predicted([*free, ref], model) for ref in resistors or candidates]
        return (resistors or candidates)[int(np.argmin(costs))]

    def _predicted(self, free: Sequence[str], model: LinearModel) -> float:
        """Mean square a descent over the parts `free` reaches in the model."""
        grid = ValueGrid(self._open(free).passives)
        neighbourhood = Neighbourhood(grid, model)
        choice = grid.counts > 1
        exact = model.reference.copy()
        exact[choice] -= compensation(model.matrix[:, choice]) @ model.offset
        starts = (grid.nearest(model.reference), grid.nearest(exact))
        return min(neighbourhood.descend(start)[1] for start in starts)

    def _error(self, circuit: Circuit) -> ResponseError:
        return response_error(compile_circuit(circuit).solve(self.frequency_hz), self.response)

    def _boards(self, circuit: Circuit) -> ToleranceResult:
        return run_boards(
            compile_circuit(circuit),
            circuit,
            self.response,
            self.frequency_hz,
            accept=self.job.accept,
            boards=self.earlier.boards,
            seed=self.earlier.seed,
        )

    def _share_of_limits(self, circuit: Circuit) -> float:
        """The larger of the errors over their limits: up to 1 meets both."""
        error = self._error(circuit)
        return max(error.largest_db / self.limits[0], error.largest_deg / self.limits[1])

    def _clipped(self, circuit: Circuit) -> set[str]:
        """References of the op-amps that would clip."""
        found = swings(circuit, self.wanted, self.job)
        return {s.amplifier for s in found if s.peak > s.peak_limit}

    def _meets(self, circuit: Circuit) -> bool:
        """Whether the errors, the yield and the swing are as good as they must be."""
        if self._share_of_limits(circuit) > 1 or self._clipped(circuit) - self.clipped:
            return False
        return self.share is None or self._boards(circuit).share >= self.share
