"""Grids: dense enough for the sharpest pair, and the very points of a SPICE sweep."""

import math

import numpy as np
import pytest

from synth.errors import JobError
from synth.grid import band_grid, judged, points_per_decade
from synth.transfer import Factor, TransferFunction


def low_pass(q: float, zero_q: float | None = None) -> TransferFunction:
    zeros = [] if zero_q is None else [Factor.pair(3000.0, zero_q)]
    return TransferFunction.from_factors(1.0, zeros, [Factor.pair(2000.0, q), Factor.real(-1e3)])


@pytest.mark.parametrize("q", [3.0, 10.0, 40.0, 100.0])
def test_eight_points_lie_across_the_half_power_width_of_the_sharpest_pair(q):
    """The half-power edges of a pair are f0 (sqrt(1 + 1/4Q^2) -+ 1/2Q)."""
    density = points_per_decade(low_pass(q))
    f0 = 2000.0 / (2 * math.pi)
    grid = band_grid((1.0, 1e4), density)
    centre, half = math.sqrt(1 + 1 / (4 * q * q)), 1 / (2 * q)
    inside = np.count_nonzero((grid > f0 * (centre - half)) & (grid < f0 * (centre + half)))
    assert inside >= 8


def test_density_stays_between_its_ends():
    assert points_per_decade(low_pass(0.6)) == 50
    assert points_per_decade(low_pass(1e6)) == 2000
    assert points_per_decade(low_pass(math.inf)) == 2000


def test_a_sharp_pair_of_zeros_counts_and_one_on_the_axis_does_not():
    assert points_per_decade(low_pass(0.6, 30.0)) == points_per_decade(low_pass(30.0))
    assert points_per_decade(low_pass(0.6, math.inf)) == 50


@pytest.mark.parametrize("high", [1000.01, 1001.0, 1050.0, 2000.0])
def test_a_narrow_band_still_gets_fifty_steps(high):
    band = (1000.0, high)
    grid = band_grid(band, points_per_decade(low_pass(1.0), band_hz=band))
    assert grid.size >= 51
    assert grid[0] == 1000.0
    np.testing.assert_allclose(grid[-1], high, rtol=1e-12, atol=0)


def test_steps_are_equal_on_a_logarithmic_axis_and_reach_both_ends():
    """10 Hz to 200 Hz at 7 per decade: floor(7 log10 20) = 9 steps."""
    grid = band_grid((10.0, 200.0), 7)
    np.testing.assert_allclose(grid, np.geomspace(10.0, 200.0, 10), rtol=1e-13, atol=0)


@pytest.mark.parametrize(
    ("band", "density", "told"),
    [
        ((1.0, 1.02), 50, "at least one step wide"),
        ((2.0, 1.0), 50, "expected lowest < highest"),
        ((0.0, 1.0), 50, "two positive frequencies"),
        ((1.0, math.nan), 50, "two positive frequencies"),
        ((1e-30, 1e30), 2000, "at most 100000"),
        ((1e-300, 1e300), 50, "fewer decades"),
        ((999.9999999, 1000.0), 4_605_170_000_000, "0.0001 % above the lowest"),
    ],
)
def test_bands_without_a_grid_are_refused(band, density, told):
    with pytest.raises(JobError, match=told):
        band_grid(band, density)


def test_only_points_on_a_zero_on_the_axis_are_left_out():
    notch = TransferFunction.from_factors(
        1.0, [Factor.pair(2 * math.pi * 100.0, math.inf)], [Factor.pair(2 * math.pi * 100.0, 1.0)]
    )
    keep = judged(notch, [99.0, 99.9999, 100.0, 100.0001])
    assert keep.tolist() == [True, True, False, True]
    assert judged(low_pass(0.6, 5.0), [3000.0 / (2 * math.pi)]).all()
