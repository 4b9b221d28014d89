"""Grids: dense enough for the sharpest pair, and the very points of a SPICE sweep."""

import math

import numpy as np
import pytest

from synth.errors import JobError
from synth.evidence import response_error
from synth.grid import band_grid, judged, judging_frequencies, points_per_decade, sweeps
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


BAND = (20.0, 5e3)


def shifted(q: float, notch: bool, *, by: float, q_by: float = 1.0):
    """A sharp resonance, or notch, whose board has it elsewhere."""

    def one(w: float, sharp: float) -> TransferFunction:
        pairs = [Factor.pair(w, sharp)], [Factor.pair(2000.0, 0.7)]
        zeros, poles = pairs if notch else ([], pairs[0])
        return TransferFunction.from_factors(1.0 if notch else w * w, zeros, poles)

    return one(2000.0, q), one(2000.0 * (1 + by), q * q_by)


@pytest.mark.parametrize("notch", [False, True])
@pytest.mark.parametrize("q", [20.0, 107.0, 110.0, 300.0, 1000.0])
@pytest.mark.parametrize(("by", "widths"), [(0.2, True), (-1.0, True), (0.0, True), (-0.02, False)])
def test_the_grid_sees_the_largest_error_of_a_board_beside_its_target(q, notch, by, widths):
    """A resonance or notch that a board has elsewhere, by some of its width or by 2 %, or of
    another sharpness: no frequency of a dense sweep has an error above the largest of the grid by
    more than 2 %, and 1 % where the grid has points of its own there."""
    shift = by / q if widths else by
    target, board = shifted(q, notch, by=shift, q_by=1.1 if by == 0 else 1.0)
    f0 = 2000.0 / (2 * math.pi)
    dense = f0 * (1 + np.linspace(-0.04, 0.04, 400_001))

    def largest(f):
        error = response_error(board.response(f), target.response(f))
        return np.array([error.largest_db, error.largest_deg])

    found = largest(judging_frequencies(target, BAND))
    assert np.all(largest(dense) <= found * (1.01 if q > 108 else 1.02))


@pytest.mark.parametrize("q", [0.7, 10.0, 100.0, math.inf])
def test_one_sweep_is_enough_up_to_a_quality_of_a_hundred(q):
    (one,) = sweeps(low_pass(q), BAND)
    assert one.points_per_decade == points_per_decade(low_pass(q), band_hz=BAND)
    np.testing.assert_array_equal(one.frequencies, judging_frequencies(low_pass(q), BAND))


@pytest.mark.parametrize("q", [200.0, 1e4, 1e8])
def test_the_sweeps_about_a_sharp_pair_are_few_points_and_stay_in_the_band(q):
    target = low_pass(q)
    whole, *further = sweeps(target, BAND)
    assert 1 <= len(further) <= 3
    assert sum(s.frequencies.size for s in further) < 2100
    grid = judging_frequencies(target, BAND)
    assert np.all(np.diff(grid) > 0)
    np.testing.assert_array_equal(np.isin(whole.frequencies, grid), True)
    f0 = 2000.0 / (2 * math.pi)
    cut = judging_frequencies(target, (20.0, f0 * 1.001))
    assert cut[-1] == pytest.approx(f0 * 1.001, rel=1e-12)
    assert sweeps(target, (1e3, 5e3)) == sweeps(target, (1e3, 5e3))[:1]
