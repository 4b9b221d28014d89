"""Confidence interval of a share, from a count."""

from __future__ import annotations

from synth.errors import JobError

__all__ = ["clopper_pearson"]


def clopper_pearson(passed: int, boards: int, confidence: float = 0.95) -> tuple[float, float]:
    """Two-sided interval of the share behind `passed` of `boards`, as two ratios.

    Clopper and Pearson 1934, "The use of confidence or fiducial limits illustrated in the case
    of the binomial": the ends are quantiles of beta distributions, so that the true share lies
    within with at least the confidence asked for.

    Raises
    ------
    JobError
        Counts or a confidence that make no sense.

    Examples
    --------
    >>> low, high = clopper_pearson(994, 1000)
    >>> round(low, 4), round(high, 4)
    (0.987, 0.9978)
    """
    if not 0 <= passed <= boards or boards < 1:
        raise JobError(
            f"got {passed} of {boards} boards, expected 0 <= passed <= boards, 1 or more"
        )
    if not 0 < confidence < 1:
        raise JobError(f"got a confidence of {confidence}, expected one between 0 and 1")
    from scipy.special import betaincinv

    tail = (1 - confidence) / 2
    low = 0.0 if passed == 0 else float(betaincinv(passed, boards - passed + 1, tail))
    high = 1.0 if passed == boards else float(betaincinv(passed + 1, boards - passed, 1 - tail))
    return low, high
