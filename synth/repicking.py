"""An earlier design without some of its values: what is bought stays, the rest is chosen again.

The parts that cannot keep their values are free, all others keep theirs.  Where the limits are
met so, that is all; also where they are missed and freeing every part would hardly help.
Otherwise further parts are freed, resistors before capacitors: one, then two, each set judged by
the best choice it has in the linear model of `synth.choosing`, then ever more, and in the end
all, until the limits are met; then every freed part that can have its old value back gets it.  A
limit that the earlier design missed need only be kept about as well as it did.

Two resistors that stand for one are chosen as one part with a value of its own where both are
free, then as two.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Collection
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from synth.candidates import Sketch, sketch_form
from synth.choosing import Choice
from synth.choosing.choose import DEFAULT_EFFORT, with_ideals
from synth.choosing.enumeration import LARGEST_ENUMERATION
from synth.choosing.grid import ValueGrid
from synth.choosing.model import Goal
from synth.choosing.pairs import Pair, as_one, with_pairs
from synth.choosing.supply import Supply
from synth.circuit import Circuit, Passive
from synth.design import judged_design
from synth.errors import RealizationError
from synth.evidence import DB_PER_NEPER, ResponseError, response_error
from synth.freeing import Freeing
from synth.grid import judging_frequencies
from synth.job import Job
from synth.limits import swings
from synth.nodal import compile_circuit
from synth.recorded import Earlier, rebuilt, recorded_pairs
from synth.request import Request, checked_request, limited
from synth.results import Design, ToleranceResult
from synth.shortages import Repick, changes_between
from synth.tolerance import run_boards
from synth.values import level_ratios, standard_values, thinned, wanted_of

__all__ = ["Request", "repick"]

Real = NDArray[np.float64]
Progress = Callable[[str, int, int], None]

# Sets of one and of two further parts, and how many of each are tried on the whole circuit.
SMALL_SETS = (1, 2)
TRIED = 3

# How many parts are freed in all where two are too few, from one attempt to the next; then every
# one.
STEPS = (3, 4, 6, 8, 12, 16)

# Effort of a search with every part free; each request makes several.  Where it misses the
# limits, it is repeated with the larger one.
EFFORT = DEFAULT_EFFORT // 2
LARGER_EFFORT = 2 * DEFAULT_EFFORT

# A nominal error up to this times the earlier one is as good; for the yield it is the lower end
# of the earlier interval.
AS_GOOD = 1.1

NO_NEW_PAIRS = (
    "the limits are missed with the parts there are; a repick puts no further pair of resistors in "
    "the place of one, as a new design of the same job may"
)


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
    pairs = recorded_pairs(sketch.circuit, earlier.parts) if job.board.pairs else ()
    circuit = rebuilt(with_pairs(sketch.circuit, pairs), earlier.parts, name=earlier.name)
    single = _single(sketch.circuit, circuit, pairs)
    wanted = checked_request(circuit, job, earlier, request)
    say("values", 0, 1)
    work = _Repicking(
        _at(sketch, circuit, frequency), job, earlier, wanted, frequency, single=single, pairs=pairs
    )
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
    changed = Repick(
        asked=request.shortages,
        earlier=earlier.shortages,
        bought=request.bought,
        all_free=request.all_free,
        missing=work.missing,
        changes=changes_between(circuit, choice.circuit),
        before=work.before,
        after=made.nominal,
        share_before=earlier.share,
        share_after=made.tolerance.share,
    )
    notices = (*made.notices, *changed.notices)
    if job.board.pairs and not work.within_limits(choice.circuit):
        notices = (*notices, NO_NEW_PAIRS)
    return replace(made, job=earlier.job, repick=changed, notices=notices)


def _single(circuit: Circuit, recorded: Circuit, pairs: tuple[Pair, ...]) -> Circuit:
    """`circuit`, which has one resistor for each of the `pairs`, at the values of `recorded`."""
    values = {p.ref: p.value for p in recorded.bought} | {pair.ref: pair.value for pair in pairs}
    at = circuit.with_values({p.ref: values[p.ref] for p in circuit.bought})
    return replace(at, passives=tuple(replace(p, ideal=p.value) for p in at.passives))


def _at(sketch: Sketch, circuit: Circuit, frequency_hz: Real) -> Sketch:
    """The sketch with the values, and so at the levels, of `circuit`."""
    ratios = level_ratios(sketch, circuit, frequency_hz)
    return replace(
        sketch,
        circuit=circuit,
        graph=sketch.graph.rescaled(ratios),
        levels={name: v * ratios.get(name, 1.0) for name, v in sketch.levels.items()},
    )


class _Repicking:
    """The search of one request; `before` is the error of the earlier design, `missing` the
    parts that must change."""

    def __init__(
        self,
        sketch: Sketch,
        job: Job,
        earlier: Earlier,
        request: Request,
        frequency_hz: Real,
        *,
        single: Circuit,
        pairs: tuple[Pair, ...],
    ) -> None:
        self.single, self.pairs = single, pairs
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
        if self.all_free or len(self.missing) == len(self.loose):
            return self._restored(self._chosen(self.loose))
        least = self._possible(self.missing)
        if least is not None and self._meets(least.circuit):
            return self._restored(least)
        few = None if least is None else self._small_set_that_meets(least)
        if few is not None:
            return self._restored(self._fewest(few))
        most = self._chosen(self.loose)
        if not self._meets(most.circuit) and self._may_be_met(most):
            most = self._chosen(self.loose, known=most.circuit, effort=LARGER_EFFORT)
        found = most if self._meets(most.circuit) else None
        if least is not None and (found or self._may_be_met(most)):
            found = self._larger_set_that_meets(least) or found
        if found is not None:
            return self._restored(self._fewest(found))
        if least is None:
            return self._restored(most)
        reached = [self._share_of_limits(c.circuit) for c in (least, most)]
        return self._restored(least if reached[0] <= AS_GOOD * reached[1] else most)

    def _small_set_that_meets(self, least: Choice) -> Choice | None:
        """The choice with one or two further parts freed that meets the limits, or None."""
        freeing = self._freeing(least)
        for size in SMALL_SETS:
            if len(self.missing) + size >= len(self.loose):
                break
            for refs in freeing.promising(self.missing, *self._candidates(()), size)[:TRIED]:
                choice = self._possible([*self.missing, *refs])
                if choice is not None and self._meets(choice.circuit):
                    return choice
        return None

    def _larger_set_that_meets(self, least: Choice) -> Choice | None:
        """The choice with ever more parts freed, from `least` on, until the limits are met; None
        where they never are short of all."""
        freeing = self._freeing(least)
        order: list[str] = []
        for count in (n for n in STEPS if len(self.missing) + n < len(self.loose)):
            while len(order) < count:
                resistors, others = self._candidates(order)
                free = [*self.missing, *order]
                order.append(freeing.most_helpful(free, resistors or others))
            choice = self._possible([*self.missing, *order])
            if choice is None:
                continue
            if self._meets(choice.circuit):
                return choice
            freeing = self._freeing(choice)
        return None

    def _candidates(self, order: Collection[str]) -> tuple[list[str], list[str]]:
        """Resistors and capacitors that may still be freed."""
        left = [ref for ref in self.loose if ref not in self.missing and ref not in order]
        kinds = [self.circuit.by_ref[ref].kind for ref in left]
        resistors = [r for r, kind in zip(left, kinds, strict=True) if kind == "resistor"]
        return resistors, [ref for ref in left if ref not in resistors]

    def _freeing(self, choice: Choice) -> Freeing:
        return Freeing(choice.circuit, self._open, self.goal, self._limit_rms())

    def _limit_rms(self) -> float:
        """Weighted rms error of a board at both limits at every frequency."""
        magnitude = self.goal.magnitude_weight * self.limits[0] / DB_PER_NEPER
        return float(np.hypot(magnitude, self.goal.phase_weight * np.radians(self.limits[1])))

    def _may_be_met(self, choice: Choice) -> bool:
        """Whether the bound of what was free in `choice` leaves room for meeting the limits."""
        return choice.certificate.lower_bound <= self._limit_rms()

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
                limited(p, self.shortages) if p.ref in free else replace(p, fixed=True)
                for p in self.circuit.passives
            ),
        )

    def _chosen(
        self, free: Collection[str], *, known: Circuit | None = None, effort: int = EFFORT
    ) -> Choice:
        """The joint search over the parts `free`, better than `known`."""
        effort = round(effort * len(free) / len(self.circuit.bought))
        known = known or self._with_pairs_as_one(free, effort)
        opened = self._open(free)
        choice = self._searched(opened, effort, known)
        counts = [float(n) for n in ValueGrid(opened.passives).counts]
        if (
            math.prod(counts) <= LARGEST_ENUMERATION
            and Supply.of(ValueGrid(opened.passives)) is None
        ):
            # Every one was solved on the whole circuit: the linear model adds nothing.
            found = choice.certificate
            sure = replace(found, lower_bound=found.rms, proven=True, exhausted=True, better=None)
            choice = replace(choice, certificate=sure)
        return choice

    def _searched(self, circuit: Circuit, effort: int, known: Circuit | None = None) -> Choice:
        return standard_values(
            replace(self.sketch, circuit=circuit),
            self.job,
            self.response,
            self.frequency_hz,
            self.earlier.seed,
            effort=effort,
            known=known,
        )

    def _with_pairs_as_one(self, free: Collection[str], effort: int) -> Circuit | None:
        """Values found with each pair of which both are free as one part; None without any."""
        whole = {p.ref: p for p in self.pairs if set(p.refs) <= set(free)}
        if not whole:
            return None
        circuit = with_pairs(self.single, tuple(p for p in self.pairs if p.ref not in whole))
        own = {p.ref: p for p in self._open(free).bought}
        drawers: dict[str, dict[float, Pair | None]] = {}
        passives: list[Passive] = []
        for part in circuit.passives:
            if (pair := whole.get(part.ref)) is None:
                passives.append(own.get(part.ref, part))
                continue
            rules = [own[ref].rule for ref in pair.refs]
            out = {v for rule in rules if rule is not None for v in rule.without}
            assert part.rule is not None
            rule = replace(part.rule, without=tuple(sorted(out)))
            one, drawers[part.ref] = as_one(part, rule, about=part.value, how=pair.how)
            passives.append(one)
        if not all(drawers.values()):
            return None
        found = self._searched(replace(circuit, passives=tuple(passives)), effort).circuit
        values = {p.ref: p.value for p in found.bought if p.ref not in whole}
        for ref, drawer in drawers.items():
            pair = drawer[found.by_ref[ref].value]
            assert pair is not None
            values |= dict(zip(whole[ref].refs, pair.values, strict=True))
        return self.circuit.with_values(values)

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
            population=self.job.board.population,
        )

    def _share_of_limits(self, circuit: Circuit) -> float:
        """The larger of the errors over their limits: up to 1 meets both."""
        error = self._error(circuit)
        return max(error.largest_db / self.limits[0], error.largest_deg / self.limits[1])

    def _clipped(self, circuit: Circuit) -> set[str]:
        """References of the op-amps that would clip."""
        found = swings(circuit, self.wanted, self.job)
        return {s.amplifier for s in found if s.peak > s.peak_limit}

    def within_limits(self, circuit: Circuit) -> bool:
        """Whether the nominal errors are as good as they must be."""
        return self._share_of_limits(circuit) <= 1

    def _meets(self, circuit: Circuit) -> bool:
        """Whether the errors, the yield and the swing are as good as they must be."""
        if self._share_of_limits(circuit) > 1 or self._clipped(circuit) - self.clipped:
            return False
        return self.share is None or self._boards(circuit).share >= self.share
