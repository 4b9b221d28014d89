"""Targets stated by coefficients."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from scipy import signal

from synth.errors import TargetError
from synth.targets import from_coefficients


def test_the_response_is_that_of_the_coefficients():
    """Against scipy.signal.freqs."""
    numerator, denominator = [3, 0, 20.5], [0, 1, 4, 30, 50]
    w = np.geomspace(0.1, 100, 40)
    _, expected = signal.freqs(numerator, denominator[1:], w)
    np.testing.assert_allclose(
        from_coefficients(numerator, denominator).at(1j * w), expected, rtol=1e-12
    )


def test_leading_zeros_are_dropped_and_rationals_stay_exact():
    target = from_coefficients([0, 0, Fraction(1, 3)], [0, 2, Fraction(1, 7)])
    assert target.numerator == (Fraction(1, 6),)
    assert target.denominator == (1, Fraction(1, 14))
    assert target.factors_are_exact


@pytest.mark.parametrize(
    ("numerator", "denominator", "message"),
    [
        ([1, math.nan], [1, 1], r"target\.numerator\[1\]: got nan, expected a finite number"),
        ([1], [1, 2, math.inf], r"target\.denominator\[2\]: got inf, expected a finite number"),
        (["1"], [1, 1], r"target\.numerator\[0\]: got '1', expected a finite number"),
        ([True], [1, 1], r"target\.numerator\[0\]: got True, expected a finite number"),
        ("12", [1, 1], r"target\.numerator: got '12', expected a list of coefficients"),
        (5, [1, 1], r"target\.numerator: got 5, expected a list of coefficients"),
        ([], [1, 1], r"target\.numerator: got no coefficient, expected a nonzero"),
        ([0, 0.0], [1, 1], r"target\.numerator: got only zeros, expected a nonzero"),
        ([1], [0], r"target\.denominator: got only zeros, expected a nonzero"),
        ([1], [1] * 26, r"target: the denominator has degree 25, expected at most 24"),
        ([1], [1e-300, 1], r"target: a root of H\(s\) lies above 1e\+12 Hz, expected roots at"),
        ([1], [1, 1e300, 1], r"target: a root of H\(s\) lies above 1e\+12 Hz"),
        ([1], [1, 1e-300], r"target: a root of H\(s\) lies below 1e-12 Hz"),
        ([1, 1e-20], [1, 5, 0], r"target: a root of H\(s\) lies below 1e-12 Hz"),
        ([1e-300], [1, 5], r"leading coefficients of H\(s\) lies outside 1e-250 to 1e250"),
    ],
)
def test_what_cannot_be_read_is_refused_with_its_place(numerator, denominator, message):
    with pytest.raises(TargetError, match=message) as caught:
        from_coefficients(numerator, denominator)
    assert "\n" not in str(caught.value)


def test_messages_speak_of_the_key_of_the_caller():
    with pytest.raises(TargetError, match=r"^loop\.denominator\[0\]: got nan"):
        from_coefficients([1], [math.nan], key="loop")


def test_roots_too_close_to_separate_are_refused_as_a_target():
    near = 1 + Fraction(1, 10**700)
    with pytest.raises(TargetError, match="could not be separated; state the target by its zeros"):
        from_coefficients([1], [1, 1 + near + 2, near + 2 * (1 + near), 2 * near])
