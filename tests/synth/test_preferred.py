"""Preferred values: the series are those of IEC 60063, and a range means what it says."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.errors import JobError
from synth.preferred import SERIES, decade, is_member, nearest, series_values

SIZES = {"E3": 3, "E6": 6, "E12": 12, "E24": 24, "E48": 48, "E96": 96, "E192": 192}


def test_every_series_has_as_many_values_in_a_decade_as_its_name_says():
    assert {name: len(set(decade(name))) for name in SERIES} == SIZES


def test_the_coarse_series_are_the_literal_ones():
    """IEC 60063: the places where E24 differs from its formula."""
    formula = [round(10 * 10 ** (k / 24)) for k in range(24)]
    differs = {v / 100: f / 10 for v, f in zip(decade("E24"), formula, strict=True) if v != 10 * f}
    assert differs == {
        2.7: 2.6,
        3.0: 2.9,
        3.3: 3.2,
        3.6: 3.5,
        3.9: 3.8,
        4.3: 4.2,
        4.7: 4.6,
        8.2: 8.3,
    }
    assert decade("E3") == (100, 220, 470)
    assert decade("E6") == (100, 150, 220, 330, 470, 680)


def test_the_fine_series_follow_the_formula_but_for_one_value():
    """IEC 60063: E192 holds 9.20 where the formula gives 9.19; E96 and E48 are every second and
    every fourth value of E192."""
    formula = [round(100 * 10 ** (k / 192)) for k in range(192)]
    differs = [(v, f) for v, f in zip(decade("E192"), formula, strict=True) if v != f]
    assert differs == [(920, 919)]
    assert decade("E96") == decade("E192")[::2]
    assert decade("E48") == decade("E192")[::4]


def test_some_values_of_e96_known_from_catalogues():
    """From memory."""
    assert {102, 105, 115, 140, 178, 249, 332, 499, 604, 750, 887, 976} <= set(decade("E96"))


def test_values_are_the_doubles_of_their_literals():
    values = series_values("E96", 1e3, 1e6)
    assert 10200.0 in values
    assert 115e3 in values
    small = series_values("E12", 100e-12, 1e-6)
    assert {2.2e-9, 3.3e-10, 4.7e-9, 100e-12, 1e-6} <= set(small.tolist())
    assert [repr(v) for v in small.tolist()[:3]] == ["1e-10", "1.2e-10", "1.5e-10"]


@pytest.mark.parametrize("series", SERIES)
def test_a_range_holds_both_its_ends(series):
    values = series_values(series, 1e3, 1e6)
    assert len(values) == 3 * SIZES[series] + 1
    assert values[0] == 1e3
    assert values[-1] == 1e6


def test_ends_that_missed_a_value_by_rounding_still_hold_it():
    values = series_values("E24", 2.2e-9 * (1 + 1e-12), 4.7e-9 * (1 - 1e-12))
    assert values[0] == 2.2e-9
    assert values[-1] == 4.7e-9
    assert len(values) == 9


def test_a_range_between_two_values_is_empty():
    assert series_values("E3", 1.01e3, 1.04e3).size == 0


@settings(deadline=None, derandomize=True, max_examples=100)
@given(
    series=st.sampled_from(SERIES),
    low=st.floats(1e-13, 1e7),
    ratio=st.floats(1, 1e4),
)
def test_a_range_holds_exactly_the_members_within_it(series, low, ratio):
    """Against a second method: walk all decades and keep what lies inside."""
    high = low * ratio
    values = series_values(series, low, high)
    literal = [float(f"{d}e{e}") for e in range(-18, 14) for d in decade(series)]
    assert values.tolist() == [v for v in literal if low * (1 - 1e-9) <= v <= high * (1 + 1e-9)]
    assert all(is_member(series, v) for v in values)


@settings(deadline=None, derandomize=True, max_examples=200)
@given(series=st.sampled_from(SERIES), x=st.floats(1e-1, 1e8))
def test_nearest_is_the_one_of_least_ratio(series, x):
    values = series_values(series, 1.0, 1e6)
    found = nearest(values, x)
    best = float(np.min(np.abs(np.log(values / x))))
    assert abs(math.log(found / x)) == pytest.approx(best, rel=1e-9, abs=1e-12)


def test_nearest_is_on_a_log_scale_and_ends_at_the_ends():
    assert nearest([1.0, 4.0], 2.2) == 4.0  # nearer to 1 on a linear scale
    assert nearest([1.0, 4.0], 2.0) == 1.0
    assert nearest([1.0, 4.0], 100.0) == 4.0
    assert nearest([1.0, 4.0], 0.01) == 1.0
    assert nearest([1.0, 4.0], 4.0) == 4.0


@pytest.mark.parametrize(("values", "x"), [([], 1.0), ([1.0], 0.0), ([1.0], math.nan)])
def test_nearest_needs_values_and_a_positive_number(values, x):
    with pytest.raises(JobError, match="expected a positive one and some values"):
        nearest(values, x)


def test_membership_holds_over_all_decades_and_to_rounding():
    assert is_member("E192", 920e3)
    assert not is_member("E192", 919e3)
    assert is_member("E96", 3 * 3.4e3)
    assert is_member("E12", 0.9999999999999999e-9)
    assert is_member("E12", 1.0000000001e-9)
    assert not is_member("E96", 10.3e3)
    assert not is_member("E96", 10.2001e3)
    assert not any(is_member("E96", x) for x in (0.0, -100.0, math.nan, math.inf))


def test_an_unknown_series_is_refused_with_those_there_are():
    for use in (lambda: series_values("E7", 1, 10), lambda: is_member("e96", 1.0)):
        with pytest.raises(JobError, match="expected one of E3, E6, E12, E24, E48, E96, E192"):
            use()


@pytest.mark.parametrize(("low", "high"), [(0, 1), (2, 1), (1, math.inf), (math.nan, 1)])
def test_a_range_that_is_none_is_refused(low, high):
    with pytest.raises(JobError, match="expected 0 < smallest <= largest"):
        series_values("E24", low, high)
