"""Bounds by the corners of the strong parts: against every corner and many points of random
pairs of determinants."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from synth.worstcase import corners
from synth.worstcase.corners import Corners
from synth.worstcase.phases import Phases, together

PARTS = 6
STRONG = (1, 3, 5, 6)


def matrices(seed: int, size: float):
    """Two matrices that share most of what they are, as X and Y of a circuit do."""
    generator = np.random.default_rng(seed)

    def drawn():
        return generator.normal(size=(PARTS, PARTS, 2)) @ [1, 1j]

    common = drawn()
    return size * (common + 0.3 * drawn()), size * (common + 0.3 * drawn())


def determinants(matrix, boards):
    return np.linalg.det(np.eye(PARTS) + matrix * boards[:, None, :])


def boards(seed: int):
    """Every corner, and boards inside."""
    ends = np.array(list(itertools.product((-1.0, 1.0), repeat=PARTS)))
    return np.vstack([ends, np.random.default_rng(seed).uniform(-1, 1, (500, PARTS))])


@pytest.mark.parametrize("strong", STRONG)
def test_corner_values_are_determinants_and_the_rest_holds_what_is_left(strong):
    matrix, _ = matrices(1, 0.1)
    found = Corners.of(matrix[None], strong)
    weak = np.random.default_rng(2).uniform(-1, 1, (200, PARTS - strong))
    for number in range(2**strong):
        ends = 2.0 * (number >> np.arange(strong) & 1) - 1
        middle = np.append(ends, np.zeros(PARTS - strong))
        np.testing.assert_allclose(
            found.value[0, number], determinants(matrix, middle[None])[0], rtol=1e-12
        )
        moved = determinants(matrix, np.hstack([np.tile(ends, (200, 1)), weak]))
        linear = found.value[0, number] + weak @ found.linear[:, 0, number]
        assert np.all(np.abs(moved - linear) <= found.rest[0, number])
        # Not idle: for some board the rest is needed to a tenth of it or more.
        if PARTS - strong > 1:
            assert np.abs(moved - linear).max() >= 0.05 * found.rest[0, number]


@pytest.mark.parametrize("size", [0.03, 0.1, 0.2])
@pytest.mark.parametrize("strong", STRONG)
@pytest.mark.parametrize("seed", range(6))
def test_no_board_passes_the_bounds_of_magnitude_and_phase(strong, size, seed):
    x, y = matrices(seed, size)
    tried = boards(seed)
    with np.errstate(all="ignore"):
        d, n = Corners.of(x[None], strong), Corners.of(y[None], strong)
        ratio = determinants(y, tried) / determinants(x, tried)
        for over, under, error in ((n, d, np.log(ratio)), (d, n, -np.log(ratio))):
            found = corners.magnitude(over, under, PARTS)
            assert error.real.max() <= found.up[0] + 1e-9
            assert found.best[0] <= error.real.max() + 1e-9 or strong < PARTS
            turned = corners.phase(over, under, PARTS)
            if np.isfinite(turned.up[0]):
                assert error.imag.max() <= turned.up[0] + 1e-9
                assert np.abs(error.imag).max() <= turned.around[0] + 1e-9
            if strong == PARTS and size < 0.05:
                assert found.up[0] <= 1.05 * error.real.max() + 1e-3


def test_numerator_and_denominator_that_turn_together_are_bounded_together():
    """One part turns both far, alike but for a little: apart they would allow the sum."""
    x = np.diag([0.8j, 0.05j, 0.02])
    y = np.diag([0.75j, 0.02, 0.05j])
    d, n = Corners.of(x[None], 3), Corners.of(y[None], 3)
    ahead, behind = Phases.of(n), Phases.of(d)
    apart = float(ahead.high[0] - behind.low[0])
    exact = max(
        np.angle(np.prod(1 + np.diag(y) * e) / np.prod(1 + np.diag(x) * e))
        for e in itertools.product(np.linspace(-1, 1, 11), repeat=3)
    )
    found = together(n, d, ahead, behind, 0)
    assert exact <= found <= 1.5 * exact
    assert apart > 5 * exact


def test_a_resonance_that_sweeps_past_is_bounded_at_its_peak():
    """1/(1 + j 3 e0) falls to either side and (1 + e1/2)/(1 + e1/5) only rises; measured off its
    middle, at 1 + j (1 + 3 e0), the resonance peaks at one side: the peak is bounded, and e1 does
    not turn the error round."""
    y = np.diag([0.0, 0.5]) + 0j
    ends = np.linspace(-1, 1, 201)
    for x in (np.diag([3j, 0.2]), np.diag([3j / (1 + 1j), 0.2])):
        found = corners.magnitude(Corners.of(y[None], 2), Corners.of(x[None], 2), 2)
        assert found.turns[0, 1] == 0
        exact = np.log(1.5 / 1.2) - np.log(np.abs(1 + x[0, 0] * ends)).min()
        assert exact <= found.up[0] <= exact + 0.02
