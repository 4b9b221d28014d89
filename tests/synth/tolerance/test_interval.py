"""Intervals of a yield against published numbers and the definition."""

import pytest

from synth.errors import JobError
from synth.tolerance import clopper_pearson


def test_clopper_pearson_agrees_with_the_published_interval_of_682_of_925():
    """682 of 925: 0.7076683..0.7654066 (scipy.stats.binomtest documents the exact method; the
    number recomputed by an independent route)."""
    assert clopper_pearson(682, 925) == pytest.approx((0.7076683, 0.7654066), abs=5e-8)


def test_clopper_pearson_agrees_with_the_scipy_documentation():
    """The documentation of scipy.stats.binomtest, proportion_ci: 7 of 50, exact, 95 %:
    0.0581917..0.2673960."""
    assert clopper_pearson(7, 50) == pytest.approx((0.0581917, 0.2673960), abs=5e-8)


@pytest.mark.parametrize(("passed", "boards"), [(0, 10), (10, 10), (3, 17), (997, 1000)])
def test_the_ends_are_where_the_binomial_tail_is_half_the_doubt(passed, boards):
    """Definition: at the lower end P(X >= passed) = 2.5 %, at the upper P(X <= passed) = 2.5 %."""
    from scipy.stats import binom

    low, high = clopper_pearson(passed, boards)
    if passed:
        assert binom.sf(passed - 1, boards, low) == pytest.approx(0.025, rel=1e-9)
    else:
        assert low == 0.0
    if passed < boards:
        assert binom.cdf(passed, boards, high) == pytest.approx(0.025, rel=1e-9)
    else:
        assert high == 1.0


def test_299_straight_passes_show_99_percent_at_95_percent_one_sided():
    """0.99^299 = 0.0495 < 0.05 < 0.99^298: the two-sided interval at 90 % has that lower end."""
    assert clopper_pearson(299, 299, 0.9)[0] > 0.99
    assert clopper_pearson(298, 298, 0.9)[0] < 0.99


def test_nonsense_is_refused():
    with pytest.raises(JobError, match="got 5 of 4 boards"):
        clopper_pearson(5, 4)
    with pytest.raises(JobError, match="got 0 of 0 boards"):
        clopper_pearson(0, 0)
    with pytest.raises(JobError, match=r"confidence of 1\.0"):
        clopper_pearson(1, 2, 1.0)
