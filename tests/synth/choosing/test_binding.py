"""Parts that bind, and what they leave undone, against plain rank counting and least squares."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from synth.choosing.binding import Frontier, binding_groups, binding_order
from synth.choosing.bottlenecks import bottlenecks
from synth.choosing.certificate import certify
from tests.synth.choosing.test_certificate import every_square, models, small

CASES = [(1, "observable", "E12"), (2, "observable", "E3"), (2, "cascade", "E6")]


@pytest.mark.parametrize(("order", "form", "series"), [*CASES, (4, "controllable", "E6")])
def test_groups_are_those_without_which_the_others_span_less(
    order: int, form: str, series: str
) -> None:
    """Second method: the rank of the columns of all other parts, set by set."""
    grid, model, _ = models(*small(order, form, series))
    free = [int(k) for k in np.flatnonzero(grid.counts > 1)]

    def rank(parts: list[int]) -> int:
        return int(np.linalg.matrix_rank(model.matrix[:, parts], tol=1e-7))

    binding = [
        g
        for size in (1, 2, 3)
        for g in itertools.combinations(free, size)
        if rank([k for k in free if k not in g]) < rank(free)
    ]
    minimal = [g for g in binding if not any(set(h) < set(g) for h in binding)]
    assert binding_groups(model.matrix, grid) == minimal
    order_, count = binding_order(model.matrix, grid)
    assert sorted(order_) == free
    assert set(order_[:count]) <= {k for g in minimal for k in g}


def test_best_of_the_grown_are_the_best_of_all() -> None:
    """The beam against every pair of values of the first two parts, bounds by least squares."""
    grid, model, _ = models(*small(2, "cascade", "E6"))
    first, second, *rest = binding_order(model.matrix, grid)[0]
    frontier = Frontier.start(model, grid)
    frontier = frontier.grown_best(first, model.matrix[:, [second, *rest]], count=10**6)
    frontier = frontier.grown_best(second, model.matrix[:, rest], count=7)
    ranks = []
    for i, j in itertools.product(range(grid.counts[first]), range(grid.counts[second])):
        change = np.array([grid.logs[first, i], grid.logs[second, j]])
        change = change - model.reference[[first, second]]
        residual = model.offset + model.matrix[:, [first, second]] @ change
        solved = np.linalg.lstsq(model.matrix[:, rest], -residual, rcond=1e-9)[0]
        left = np.linalg.norm(residual + model.matrix[:, rest] @ solved)
        ranks.append(left * (1 + 0.1 * np.linalg.norm(change)))
    found = np.sqrt(frontier.bounds(model.matrix[:, rest]))
    logs = grid.logs[np.array([[first], [second]]), frontier.chosen]
    distance = np.linalg.norm(logs - model.reference[[first, second]][:, None], axis=0)
    np.testing.assert_allclose(
        found * (1 + 0.1 * distance), np.sort(ranks)[:7], rtol=1e-6, atol=1e-10
    )


@pytest.mark.parametrize(("order", "form", "series"), CASES[:2])
def test_what_a_set_leaves_undone_is_below_every_choice(order: int, form: str, series: str) -> None:
    """And it is reached: the least over the set's values, all others by least squares."""
    grid, model, start = models(*small(order, form, series))
    best = float(np.sqrt(np.min(every_square(grid, model))))
    found = bottlenecks(grid, model)
    assert found
    assert [b.rms for b in found] == sorted((b.rms for b in found), reverse=True)
    refs = [p.ref for p in grid.parts]
    for set_ in found:
        group = [refs.index(r) for r in set_.refs]
        others = [k for k in np.flatnonzero(grid.counts > 1) if k not in group]
        least = np.inf
        for choice in itertools.product(*(range(grid.counts[k]) for k in group)):
            change = grid.logs[group, list(choice)] - model.reference[group]
            residual = model.offset + model.matrix[:, group] @ change
            solved = np.linalg.lstsq(model.matrix[:, others], -residual, rcond=1e-9)[0]
            least = min(least, float(np.sum((residual + model.matrix[:, others] @ solved) ** 2)))
        assert set_.rms == pytest.approx(np.sqrt(least + model.floor), rel=1e-6, abs=1e-10)
        assert set_.rms <= best * (1 + 1e-9)
    assert certify(grid, model, start).lower_bound >= found[0].rms * (1 - 1e-9)
