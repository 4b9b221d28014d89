"""The worst board of all: climbs for what is reached, branch and bound for what cannot be passed.

Parts that share no term of numerator or denominator do so in groups (`synth.worstcase.groups`):
ln H is a sum over groups, and so are its bounds.  Every pair of a frequency and a sign of the
error starts with the whole box of each group.  Of the pair with the highest sum of bounds, the
group whose bound is farthest from what it is known to reach is taken up: parts with a slope of one
sign over the whole box are set to the end that is worse, otherwise the part that adds most to the
doubt is cut in half.  The search is done once no sum is more than `CLOSE` above what is reached.
When the work is used up, the highest sum still holds; it is just wider.

A bound is first that of the given frequencies alone.  Where the target is known between them as
well, `synth.worstcase.between` extends it to the whole band.  Where a board is found on which the
response vanishes or grows without limit (`synth.worstcase.vanishing`), there is none.
"""

from __future__ import annotations

import heapq
import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synth.circuit import Circuit
from synth.errors import CircuitError
from synth.transfer import TransferFunction
from synth.worstcase.ascent import climb, follow
from synth.worstcase.between import Cover
from synth.worstcase.boxes import Pair, Start, Taken, at_once, divided
from synth.worstcase.enclosure import enclose
from synth.worstcase.expansion import Expansion, Parts
from synth.worstcase.outcome import without_tolerance, worst_error
from synth.worstcase.result import MEET, WorstCase
from synth.worstcase.vanishing import Vanishing, find_vanishing

__all__ = ["DEFAULT_WORK", "worst_case"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Climb = Callable[..., tuple[Real, Real]]

DEFAULT_WORK = 25_000_000
"""Work for the bound of each of magnitude and phase, in entries of arrays: some three seconds."""

BAND_SHARE = 0.6
"""Work for the band between the frequencies, against that at them, beside what that leaves."""

BOX_WORK = 10_000
"""Work of a box beside its arrays."""

CLOSE = 0.02
"""Relative distance of bound and reached at which the search is done."""

BATCH = 64
"""Boxes enclosed at once."""

STRONG = (8, 12, 16)
"""Parts whose corners are gone through, with rising care."""

WEAK_SHARE = 0.5
"""A box is looked at with more care, instead of being divided, where the parts that are not gone
through make more than this share of what is open."""

CLIMBS = 6
"""Climbs from first-order corners, at different frequencies, and as many from random boards."""

RIDGES = 4
"""Boards from which ridges are followed."""

RETURNS = 4
"""Times the board reached is looked at over the whole band, to go on where it is worst."""

NEAR = (-4, -2, -1, 0, 1, 2, 4)
"""Frequencies beside the worst one that are tried as well, in steps of the grid."""

SUSPICIOUS = 2.0
"""An error reached [Np, rad] from which its frequency is searched for a board on which the
response vanishes or grows without limit."""

SEED = 1
"""Of the random boards."""

DIRECTIONS = {"dB": (1.0, -1.0), "deg": (-1.0j, 1.0j)}


def worst_case(
    circuit: Circuit,
    target_response: ArrayLike,
    frequency_hz: ArrayLike,
    *,
    target: TransferFunction | None = None,
    ranges: ArrayLike | None = None,
    work: int = DEFAULT_WORK,
) -> WorstCase:
    """Largest errors of magnitude and phase over all boards within tolerance.

    Parameters
    ----------
    circuit
        Values and tolerances; parts without a tolerance and op-amps stay as they are.
    target_response
        What the output should show, complex, shape (F,).
    frequency_hz
        Where it is compared [Hz], shape (F,).
    target
        H(s) of `target_response`; with it, a bound at all frequencies of the band is looked for.
    ranges
        Smallest and largest multiple of its nominal value that each passive may have, shape
        (2, P); None: by its tolerance.
    work
        See `DEFAULT_WORK`; the bound is valid whatever it is.

    Raises
    ------
    CircuitError
        A target of another shape.
    NumericalError
        The equations are singular on a board.
    """
    frequency = np.asarray(frequency_hz, dtype=float)
    wanted = np.asarray(target_response, dtype=complex)
    if frequency.ndim != 1 or not frequency.size or wanted.shape != frequency.shape:
        raise CircuitError(
            f"got a target of shape {wanted.shape} at frequencies of shape {frequency.shape}, "
            "expected one value at each of one or more frequencies"
        )
    parts = Parts.of(circuit, ranges)
    if not parts.active.size:
        return without_tolerance(parts, wanted, frequency)
    start = Start.of(parts, 2j * np.pi * frequency)
    searches = {unit: _Search(start, wanted, unit) for unit in DIRECTIONS}
    for search in searches.values():
        search.climb()
    suspects = [s.place for s in searches.values() if s.reached > SUSPICIOUS]
    vanishing = find_vanishing(start, wanted, suspects)
    cover = None if target is None else Cover.of(parts, target, 2 * np.pi * frequency)
    found = {}
    for unit, search in searches.items():
        if vanishing is not None:
            search.note_vanishing(vanishing)
        bound = search.bound(work)
        everywhere = (
            math.inf
            if cover is None
            else search.between(cover, bound, search.spare + int(BAND_SHARE * work))
        )
        found[unit] = worst_error(parts, search, bound, everywhere, frequency)
    boxes = sum(search.enclosed for search in searches.values())
    return WorstCase(
        magnitude_db=found["dB"],
        phase_deg=found["deg"],
        frequencies=frequency.size,
        boxes=boxes,
    )


@dataclass(eq=False)
class _Search:
    """Search for the largest error of one kind; errors in [Np] or [rad] until they leave."""

    start: Start
    target: Complex
    unit: str
    reached: float = -math.inf
    board: Real = field(default_factory=lambda: np.zeros(0))
    place: int = 0
    sign: int = 0
    enclosed: int = 0
    spare: int = 0
    unlimited: str = ""
    _pairs: list[Pair] = field(default_factory=list)

    def climb(self) -> None:
        """Set `reached` by climbs from the corners of first order and from random boards."""
        low, high = self.start.box
        count, centre = self.start.s.size, (low + high) / 2
        x, y = (
            np.diagonal(m, axis1=1, axis2=2)
            for m in (self.start.expansion.denominator, self.start.expansion.numerator)
        )
        sign = np.repeat([0, 1], count)
        place = np.tile(np.arange(count), 2)
        c = np.array(DIRECTIONS[self.unit])[sign]
        with np.errstate(all="ignore"):
            slope = (c[:, None] * (y - x)[place]).real
            corners = np.where(slope > 0, high, low)
            slope *= (high - low) / 2 / centre
            error = (c * np.log(self.start.expansion.response / self.target)[place]).real
        likely = np.nan_to_num(error + np.abs(slope).sum(axis=1), nan=0.0)
        s = self.start.s[place]
        step = at_once(low.size * self.start.parts.structure.size)
        with np.errstate(all="ignore"):
            there = np.concatenate(
                [
                    self.start.parts.response(s[k : k + step], corners[k : k + step])
                    for k in range(0, s.size, step)
                ]
            )
            actual = np.nan_to_num((c * np.log(there / self.target[place])).real, nan=0.0)
        chosen = np.append(_apart(likely, place), _apart(actual, place))
        generator = np.random.default_rng(SEED)
        random = generator.uniform(low, high, (CLIMBS, low.size))
        again = chosen[np.arange(CLIMBS) % chosen.size]
        chosen, boards = np.append(chosen, again), np.vstack([corners[chosen], random])
        place, sign = place[chosen], sign[chosen]
        error, boards = self._climbed(climb, place, sign, boards)
        # At a corner that climbs end in, all slopes point outward; ridges lead elsewhere.
        inside = np.flatnonzero(((boards > low) & (boards < high)).any(axis=1))
        best = inside[np.argsort(-error[inside], kind="stable")[:RIDGES]]
        if best.size:
            self._climbed(follow, place[best], sign[best], boards[best])
        for _ in range(RETURNS):
            before = self.reached
            self._return_to_worst(follow if best.size else climb)
            if not self.reached > before * (1 + CLOSE / 10):
                break

    def note_vanishing(self, found: Vanishing) -> None:
        """Take over a proof that the magnitude has no limit and the phase takes every value."""
        if self.unit == "dB":
            self.unlimited = found.what
        board = found.board if self.unit == "dB" else found.opposite
        if board is None:
            return
        k = found.place
        with np.errstate(all="ignore"):
            response = self.start.parts.response(self.start.s[k : k + 1], board[None])
            error = np.log(response / self.target[k])
        for sign, c in enumerate(DIRECTIONS[self.unit]):
            self._note((c * error).real, np.array([k]), np.array([sign]), board[None])

    def _return_to_worst(self, method: Climb) -> None:
        """Go on from the board reached, at the frequencies where it is worst."""
        start = self.start
        boards = np.tile(self.board, (start.s.size, 1))
        with np.errstate(all="ignore"):
            error = np.log(start.parts.response(start.s, boards) / self.target)
        c = np.array(DIRECTIONS[self.unit], dtype=complex)
        size = np.nan_to_num((c[:, None] * error).real, nan=-np.inf).ravel()
        chosen = _apart(size, np.tile(np.arange(start.s.size), 2))
        near = np.clip(self.place + np.array(NEAR), 0, start.s.size - 1)
        place = np.append(chosen % start.s.size, near)
        sign = np.append(chosen // start.s.size, np.full(near.size, self.sign))
        self._climbed(method, place, sign, np.tile(self.board, (place.size, 1)))

    def _climbed(
        self,
        method: Climb,
        place: NDArray[np.intp],
        sign: NDArray[np.intp],
        boards: Real,
    ) -> tuple[Real, Real]:
        c = np.array(DIRECTIONS[self.unit], dtype=complex)[sign]
        found = method(self.start.parts, self.start.s[place], self.target[place], c, boards)
        self._note(found[0], place, sign, found[1])
        return found

    def _note(
        self, error: Real, place: NDArray[np.intp], sign: NDArray[np.intp], boards: Real
    ) -> None:
        best = int(np.argmax(np.nan_to_num(error, nan=-np.inf)))
        if error[best] > self.reached:
            self.reached, self.board = float(error[best]), boards[best]
            self.place, self.sign = int(place[best]), int(sign[best])

    def bound(self, work: int) -> float:
        """Enclose boxes until bound and reached are close or the work is done [Np], [rad]."""
        if self.unlimited:
            return math.inf
        self._enclose_whole()
        before = self.reached
        ranked = [(-pair.total, k) for k, pair in enumerate(self._pairs)]
        heapq.heapify(ranked)
        # A phase error is taken modulo a turn: half a turn is always a bound.
        most = math.pi if self.unit == "deg" else math.inf
        while min(-ranked[0][0], most) > (1 + CLOSE) * self.reached and work > 0:
            batch = [heapq.heappop(ranked)[1]]
            while ranked and len(batch) < BATCH and -ranked[0][0] > (1 + CLOSE) * self.reached:
                batch.append(heapq.heappop(ranked)[1])
            work -= self._enclose([self._pairs[k] for k in batch])
            for k in batch:
                heapq.heappush(ranked, (-self._pairs[k].total, k))
        self.spare = max(work, 0)
        if self.reached > before:
            self._return_to_worst(follow)
        return min(max(self.reached, -ranked[0][0]), most)

    def between(self, cover: Cover, bound: float, work: int) -> float:
        """What no board passes at any frequency of the band [Np], [rad]."""
        if not self._pairs:
            return math.inf
        totals = np.array([pair.total for pair in self._pairs]).reshape(2, -1)
        c = np.array(DIRECTIONS[self.unit], dtype=complex)
        # A phase error is taken modulo a turn: half a turn is always a bound.
        if self.unit == "deg" and (1 + MEET) * self.reached >= math.pi:
            return math.pi
        found = cover.bound(totals, c, reached=self.reached, board=self.board, work=work)
        return max(min(found, math.pi if self.unit == "deg" else math.inf), bound)

    def _enclose_whole(self) -> None:
        """The whole box of every group at every frequency, both ways."""
        start = self.start
        low, high = start.box
        count, own = start.s.size, start.expansion
        step = at_once(low.size**2)
        for sign, c in enumerate(DIRECTIONS[self.unit]):
            with np.errstate(all="ignore"):
                offset = (c * np.log(own.response / self.target)).real
            bounds = np.empty((count, len(start.groups)))
            for first in range(0, count, step):
                kept = slice(first, first + step)
                part = Expansion(own.response[kept], own.denominator[kept], own.numerator[kept])
                size = part.response.size
                for g, group in enumerate(start.groups):
                    tau = np.zeros((size, low.size))
                    tau[:, group] = ((high - low) / (high + low))[group]
                    found = enclose(part, part.response, np.full(size, c), tau, cubic=False)
                    bounds[kept, g] = found.bound
            self._pairs += [
                Pair(k, sign, float(offset[k]), start, bounds[k].tolist()) for k in range(count)
            ]

    def _enclose(self, pairs: list[Pair]) -> int:
        """Take up the most doubtful box of each pair; the work it took."""
        taken = [(pair, pair.take()) for pair in pairs]
        work = 0
        for level, strong in enumerate(STRONG):
            chosen = [(pair, box) for pair, box in taken if box.level == level]
            widest = max((int((box.high > box.low).sum()) for _, box in chosen), default=0)
            weak = max(widest - strong, 0)
            entries = max(widest**3, 2 ** min(strong, widest) * (4 + weak * weak))
            step = at_once(entries)
            for first in range(0, len(chosen), step):
                self._enclosed(chosen[first : first + step], strong)
            work += len(chosen) * (BOX_WORK + entries)
        self.enclosed += len(pairs)
        return work

    def _enclosed(self, chosen: list[tuple[Pair, Taken]], strong: int) -> None:
        """Enclose boxes by the corners of `strong` parts, and put back what is left of them."""
        place = np.array([pair.place for pair, _ in chosen])
        low, high = (np.stack([getattr(box, end) for _, box in chosen]) for end in ("low", "high"))
        c = np.array(DIRECTIONS[self.unit], dtype=complex)[[pair.sign for pair, _ in chosen]]
        centre, tau = (low + high) / 2, (high - low) / (high + low)
        found = enclose(
            self.start.parts.expand(self.start.s[place], centre),
            self.start.expansion.response[place],
            c,
            tau,
            strong=strong,
        )
        at_corner = centre * (1 + tau * found.corner)
        for k, (pair, box) in enumerate(chosen):
            here = min(box.bound, float(found.bound[k]))
            pair.note(box.group, float(found.centre[k]), centre[k])
            pair.note(box.group, float(found.best[k]), at_corner[k])
            open_by = here - pair.best[box.group]
            moving = int((high[k] > low[k]).sum())
            more = moving > strong and box.level + 1 < len(STRONG)
            if more and not (math.isfinite(here) and found.weak[k] <= WEAK_SHARE * open_by):
                pair.put(box.group, here, (low[k], high[k]), box.level + 1)
            else:
                for smaller in divided(low[k], high[k], found, k):
                    pair.put(box.group, here, smaller, box.level)
            self._combine(pair)

    def _combine(self, pair: Pair) -> None:
        """Note the board that is put together of the best of every group."""
        best = pair.offset + sum(pair.best)
        if not self.reached < best <= (math.inf if self.unit == "dB" else math.pi):
            return
        low, high = self.start.box
        board = (low + high) / 2
        for group, own in zip(self.start.groups, pair.boards, strict=True):
            board[group] = own[group]
        self.reached, self.board = best, board
        self.place, self.sign = pair.place, pair.sign


def _apart(likely: Real, place: NDArray[np.intp]) -> NDArray[np.intp]:
    """The likeliest places to start from, no two next to each other."""
    distance = max(1, int(place.max()) // 50)
    chosen: list[int] = []
    for k in np.argsort(-likely, kind="stable"):
        if all(abs(place[k] - place[j]) > distance for j in chosen):
            chosen.append(int(k))
        if len(chosen) == CLIMBS:
            break
    return np.array(chosen, dtype=np.intp)
