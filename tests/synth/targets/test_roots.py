"""Targets stated by zeros, poles and gain."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from synth.errors import TargetError
from synth.targets import Root, from_roots

frequencies = st.floats(0, 6).map(lambda k: 10**k)
signed = st.tuples(frequencies, st.sampled_from([1, -1])).map(lambda p: p[0] * p[1])
roots = st.one_of(signed.map(Root), st.tuples(signed, st.floats(0.1, 50)).map(lambda p: Root(*p)))


def _rad(root: Root) -> list[complex]:
    """The roots in rad/s by the textbook formula, in doubles."""
    w0 = 2 * math.pi * float(root.frequency_hz)
    if root.q is None:
        return [complex(-w0)]
    return list(np.roots([1, w0 / float(root.q), w0**2]).astype(complex))


@settings(deadline=None, derandomize=True, max_examples=50)
@given(st.lists(roots, max_size=2), st.lists(roots, min_size=2, max_size=5), frequencies)
def test_the_response_is_that_of_the_roots(zeros, poles, gain_at):
    """Against scipy.signal.freqs_zpk."""
    target = from_roots(zeros, poles, -2.5, gain_at)
    z = [r for root in zeros for r in _rad(root)]
    p = [r for root in poles for r in _rad(root)]
    f = np.geomspace(1, 1e6, 13)
    _, shape = signal.freqs_zpk(z, p, 1, 2 * np.pi * np.array([gain_at, *f]))
    expected = -2.5 * shape[1:] / abs(shape[0])
    np.testing.assert_allclose(target.response(f), expected, rtol=1e-9)
    assert abs(complex(target.response(gain_at))) == pytest.approx(2.5, rel=1e-12)


def test_the_sides_of_the_plane_follow_the_sign_of_the_frequency():
    target = from_roots([Root(-3000), Root(0)], [Root(100), Root(-50, 2), Root(1000, 0.8)], 1, 200)
    assert sorted(target.zeros.real) == pytest.approx([0, 2 * math.pi * 3000], rel=1e-15)
    assert [p.real > 0 for p in target.poles] == [False, True, True, False, False]
    assert target.factors_are_exact


@pytest.mark.parametrize("q", [0.5, 0.2, Fraction(1, 1000)])
def test_a_pair_of_low_q_is_two_real_roots(q):
    target = from_roots([], [Root(1000, q)], 1, "dc")
    assert not any(target.poles.imag)
    assert math.prod(target.poles.real) == pytest.approx((2000 * math.pi) ** 2, rel=1e-14)
    assert sum(target.poles.real) == pytest.approx(-2000 * math.pi / float(q), rel=1e-14)


def test_zeros_of_infinite_q_are_a_notch():
    notch = from_roots([Root(50, math.inf)], [Root(50, 2)], 1, "inf")
    assert abs(complex(notch.response(50))) < 1e-15
    assert complex(notch.response(5e6)) == pytest.approx(1, rel=1e-4)


@pytest.mark.parametrize("gain", [40, -40])
def test_gain_at_dc_and_infinity_is_h_itself_sign_included(gain):
    zeros, poles = [Root(-120)], [Root(3000)]
    assert complex(from_roots(zeros, poles, gain, "dc").response(0)) == pytest.approx(
        gain, rel=1e-15
    )
    assert from_roots(zeros, poles, gain, "inf").gain == gain


@pytest.mark.parametrize("gain", [40, -40])
def test_gain_at_a_frequency_has_the_sign_of_the_leading_coefficient(gain):
    """So a zero in the right half-plane makes H(0) negative for a positive gain."""
    target = from_roots([Root(-120)], [Root(3000)], gain, 10)
    assert math.copysign(1, target.gain) == math.copysign(1, gain)
    assert abs(complex(target.response(10))) == pytest.approx(40, rel=1e-14)
    assert math.copysign(1, complex(target.response(0)).real) == -math.copysign(1, gain)


def test_exact_magnitudes_stay_exact():
    """3-4-5: |j3 + 4| = 5 in units of the frequency."""
    target = from_roots([], [Root(4)], 1, 3)
    assert target.gain == 5 * 2 * Fraction(math.pi)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ((math.nan,), "frequency: got nan, expected a finite frequency"),
        ((math.inf,), "frequency: got inf, expected a finite frequency"),
        (("1 kHz",), "frequency: got '1 kHz', expected a finite frequency"),
        ((100, 0), r"q: got 0, expected a positive number \(a negative frequency puts a pair"),
        ((100, -2), "q: got -2, expected a positive number"),
        ((100, math.nan), "q: got nan, expected a positive number"),
        ((100, -math.inf), "q: got -inf, expected a positive number"),
        ((0, 1), "frequency: got a pair at 0 Hz, expected a frequency other than 0; list 0 twice"),
        ((0, math.inf), "frequency: got a pair at 0 Hz"),
    ],
)
def test_a_root_that_is_none_is_refused(arguments, message):
    with pytest.raises(TargetError, match=message):
        Root(*arguments)


P, Z = [Root(100)], [Root(20)]


@pytest.mark.parametrize(
    ("zeros", "poles", "gain", "gain_at", "message"),
    [
        ([], P, 0, "dc", r"target\.gain: got 0, expected a finite number other than 0"),
        ([], P, math.nan, "dc", r"target\.gain: got nan, expected a finite number other"),
        ([], P, 1, 0, r"target\.gain_at: got 0 Hz, expected 'dc', 'inf' or a frequency above 0"),
        ([], P, 1, -5, r"target\.gain_at: got -5 Hz, expected 'dc'"),
        ([], P, 1, "ac", r"target\.gain_at: got 'ac', expected 'dc', 'inf' or a frequency"),
        ([], P, 1, math.nan, r"target\.gain_at: got nan, expected 'dc'"),
        (
            Z,
            [Root(0)],
            1,
            "dc",
            r"gain_at: got 'dc', where H\(s\) is infinite .* expected 'inf' or",
        ),
        ([Root(0)], P, 1, "dc", r"got 'dc', where H\(s\) is zero .* expected 'inf' or a frequency"),
        ([], [Root(0)], 1, "dc", r"is infinite because of its root .* expected a frequency inside"),
        (
            [Root(0)],
            [Root(0), Root(9)],
            1,
            "dc",
            r"is undefined because of its root at the origin; expected a frequency inside",
        ),
        (
            [],
            P,
            1,
            "inf",
            r"got 'inf', where H\(s\) is zero \(zeros: 0, poles: 1\); expected 'dc' or a frequency",
        ),
        (Z + Z, P, 1, "inf", r"got 'inf', where H\(s\) is infinite \(zeros: 2, poles: 1\)"),
        ([], [Root(0)], 1, "inf", "expected a frequency inside the band"),
        (
            [Root(50, math.inf)],
            [Root(50, 2)],
            1,
            50.0,
            r"gain_at: got 50 Hz, which is a zero of H\(s\); expected 'dc', 'inf' or another",
        ),
        ([], [Root(50, math.inf)], 1, 50, r"got 50 Hz, which is a pole of H\(s\)"),
        ([], [Root(10)] * 25, 1, "dc", r"target\.poles: got 25 roots, expected at most 24"),
        ([], [Root(1e13)], 1, "dc", r"a root of H\(s\) lies above 1e\+12 Hz"),
        ([], [Root(1e11, 1e-3)], 1, "dc", r"a root of H\(s\) lies above 1e\+12 Hz"),
        ([Root(1e-13)], P, 1, "dc", r"a root of H\(s\) lies below 1e-12 Hz"),
    ],
)
def test_what_cannot_be_met_is_refused(zeros, poles, gain, gain_at, message):
    with pytest.raises(TargetError, match=message):
        from_roots(zeros, poles, gain, gain_at)
