"""What is accepted of a target, what is refused, and what cancels."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest

from synth.errors import TargetError
from synth.targets import Root, accept, from_coefficients, from_expression, from_roots
from synth.transfer import Factor, TransferFunction

BAND = (1.0, 20e3)
F = np.geomspace(0.5, 5e4, 200)


def _accept(target, *, allow_unstable=False, band_hz=BAND):
    return accept(target, allow_unstable=allow_unstable, band_hz=band_hz)


def _roots(zeros, poles, gain_at=77.7):
    return from_roots(
        [z if isinstance(z, Root) else Root(z) for z in zeros],
        [p if isinstance(p, Root) else Root(p) for p in poles],
        1,
        gain_at,
    )


def test_a_target_where_nothing_cancels_is_returned_as_it_is():
    target = _roots([120, -3000], [0, Root(1000, 0.8)])
    accepted, notices = _accept(target)
    assert accepted is target
    assert notices == ()


@pytest.mark.parametrize(
    ("target", "message"),
    [
        (
            _roots([120, 300], [10]),
            r"^target: H\(s\) is improper, with 2 zeros and 1 pole; add 1 pole 5 to 20 times above "
            r"the highest zero, between 1\.5 kHz and 6 kHz \(common practice\)$",
        ),
        (
            from_coefficients([1, 0, 0], [1]),
            r"improper, with 2 zeros and no pole; add 2 poles 5 to 20 times above the band, "
            r"between 100 kHz and 400 kHz",
        ),
        (_roots([], [-100]), r"poles in the right half-plane \(100 Hz\), expected only poles that"),
        (
            _roots([], [-100, Root(-2000, 3), 5]),
            r"H\(s\) has poles in the right half-plane \(100 Hz, 2 kHz \(Q = 3\)\), expected only "
            r"poles that decay, unless allow_unstable = true",
        ),
        (_roots([], [Root(50, math.inf), 4]), r"poles on the imaginary axis \(50 Hz\), expected"),
        (
            _roots([-100, 7], [-100, 5]),
            r"right half-plane \(100 Hz\); a zero that lies on it does not remove it, so",
        ),
        (
            _roots([-100.000001], [-100, 5]),
            r"right half-plane \(100 Hz\); a zero that lies on it does not remove it",
        ),
        (from_coefficients([3], [4]), r"H\(s\) is the constant 0\.75, expected at least one pole"),
        (
            _roots([10, Root(30, 2)], [Root(30, 2), 10]),
            r"the constant 1 once its poles and zeros have cancelled, expected at least one pole",
        ),
        (_roots([], range(1, 14)), r"H\(s\) has 13 poles, expected at most 12"),
        (
            TransferFunction(
                (Fraction(0),), (Fraction(1), Fraction(1)), (), (Factor.real(-1),), True
            ),
            r"H\(s\) is zero, expected a numerator",
        ),
    ],
)
def test_what_cannot_be_built_is_refused(target, message):
    with pytest.raises(TargetError, match=message) as caught:
        _accept(target)
    assert "\n" not in str(caught.value)
    assert caught.value.exit_code == 2


def test_poles_that_do_not_decay_are_accepted_when_they_are_meant():
    target = _roots([], [-100, Root(50, math.inf)])
    assert _accept(target, allow_unstable=True)[0] is target


def test_a_pole_at_the_origin_is_welcome_and_two_come_with_a_notice():
    assert _accept(_roots([120], [0]))[1] == ()
    (notice,) = _accept(_roots([120], [0, 0]))[1]
    assert notice.startswith("H(s) has 2 poles at the origin: an offset grows faster than a ramp")


def test_equal_roots_cancel_exactly_and_the_others_keep_their_factors():
    target = _roots([120, Root(500, 3)], [Root(500, 3), 0, 1000])
    accepted, notices = _accept(target)
    assert notices == (
        "a pole and a zero at 500 Hz (Q = 3) cancel; H(s) of order 2 is built instead of order 4",
    )
    assert accepted.zero_factors == target.zero_factors[:1]
    assert accepted.pole_factors == target.pole_factors[1:]
    assert accepted.factors_are_exact
    assert accepted.gain == target.gain
    np.testing.assert_allclose(accepted.response(F), target.response(F), rtol=1e-13)


def test_coefficients_cancel_by_their_common_divisor():
    """(s+2)(s+3)^2 / (s+3)(s+5)(s+7), multiplied out."""
    target = from_coefficients(np.poly([-2, -3, -3]).tolist(), np.poly([-3, -5, -7]).tolist())
    accepted, (notice,) = _accept(target, band_hz=(0.1, 10))
    assert accepted.numerator == (1, 5, 6)
    assert accepted.denominator == (1, 12, 35)
    assert notice.startswith("a pole and a zero at 0.4775 Hz cancel; H(s) of order 2")


def test_multiplicities_count():
    accepted, notices = _accept(_roots([100, 100], [100, 100, 100, 40]))
    assert accepted.order == 2
    assert sorted(accepted.poles.real) == pytest.approx([-200 * math.pi, -80 * math.pi], rel=1e-15)
    assert len(notices) == 2


def test_one_root_of_a_real_pair_cancels_a_real_zero():
    """Q = 0.4 at 100 Hz has its real poles at 50 Hz and 200 Hz."""
    target = _roots([50], [Root(100, Fraction(2, 5)), 3])
    accepted, (notice,) = _accept(target)
    assert sorted(accepted.poles.real) == pytest.approx([-400 * math.pi, -6 * math.pi], rel=1e-14)
    assert notice.startswith("a pole and a zero at 50 Hz cancel; H(s) of order 2 is built")
    np.testing.assert_allclose(accepted.response(F), target.response(F), rtol=1e-12)


@pytest.mark.parametrize("q", [Fraction(2, 5), 0.3])
def test_one_root_of_a_real_pair_cancels_a_zero_beside_it(q):
    pair = Root(100, q).factor
    slow = -float(max(r.real for r in pair.roots)) / (2 * math.pi)
    target = _roots([slow * (1 + 3e-7)], [Root(100, q), 3])
    accepted, notices = _accept(target)
    assert accepted.order == 2
    assert len(notices) == 1
    np.testing.assert_allclose(accepted.response(F), target.response(F), rtol=1e-6)


@pytest.mark.parametrize("real", [True, False])
def test_roots_within_the_tolerance_cancel_with_both_values(real):
    pole, zero = (Root(200), Root(200.0001)) if real else (Root(200, 2), Root(200.00001, 2.0000001))
    target = _roots([zero, 5], [pole, 10, 1000])
    accepted, notices = _accept(target)
    assert accepted.order == 2
    assert "coincide within 1e-06 and cancel" in notices[0]
    assert "200 Hz" in notices[0]
    assert ("200.0001 Hz" if real else "200.00001 Hz") in notices[0]
    change = np.max(np.abs(accepted.response(F) / target.response(F) - 1))
    assert 1e-9 < change < 1.5e-6


def test_roots_beyond_the_tolerance_stay():
    target = _roots([200.001], [200, 1000])
    assert _accept(target)[0] is target


def test_a_lightly_damped_pair_keeps_a_zero_that_a_well_damped_one_would_lose():
    """The same distance changes H by Q times as much."""
    damped = _roots([Root(200.00001, 1)], [Root(200, 1), 10])
    ringing = _roots([Root(200.00001, 500)], [Root(200, 500), 10])
    assert _accept(damped)[0].order == 1
    assert _accept(ringing)[0] is ringing
    change = ringing.response(200.0) / from_roots([], [Root(10)], 1, 77.7).response(200.0)
    assert abs(complex(change) - 1) > 2e-5


def test_a_double_pole_that_rounding_has_split_still_meets_its_zero():
    target = from_coefficients([1, 0.1], [1, 0.2, 0.1 * 0.1])
    assert len(set(target.poles)) == 2
    assert all(target.poles.imag)
    accepted, _ = _accept(target, band_hz=(1e-3, 1))
    assert accepted.order == 1
    assert accepted.poles[0] == pytest.approx(-0.1, rel=1e-7)


def test_a_real_zero_does_not_cancel_one_half_of_a_pair():
    target = _roots([100], [Root(100, 0.500001), 3])
    assert _accept(target)[0] is target


def test_an_unstable_pole_under_an_exact_zero_leaves_with_a_warning():
    accepted, (notice,) = _accept(_roots([-100, 7], [-100, 5, 9]), allow_unstable=True)
    assert accepted.order == 2
    assert "100 Hz in the right half-plane cancel, a mode that does not decay" in notice


def test_an_unstable_pole_beside_a_zero_stays():
    target = _roots([-100.000001, 7], [-100, 5])
    accepted, (notice,) = _accept(target, allow_unstable=True)
    assert accepted is target
    assert "nearly coincide but both stay, because the pole does not decay" in notice


def test_an_integrator_behind_a_zero_at_the_origin_cancels_with_a_warning():
    accepted, (notice,) = _accept(from_expression("1000 s/(s (s+500))"))
    assert accepted.poles_at_origin == 0
    assert notice.startswith("a pole and a zero at the origin cancel, a mode that does not decay")


def test_order_is_counted_after_cancelling():
    assert _accept(_roots([1], range(1, 14)))[0].order == 12


@pytest.mark.parametrize(
    ("poles", "nearest"),
    [
        ([1e6], "the pole at 1 MHz"),
        ([0.01, 1e6, 0], "the pole at 1 MHz"),
        ([0.3], "the pole at 0.3 Hz"),
    ],
)
def test_a_band_that_misses_every_root_is_noticed(poles, nearest):
    (notice,) = _accept(_roots([], poles))[1]
    assert notice.startswith("no pole or zero between 0.5 Hz and 40 kHz")
    assert notice.endswith(f"the nearest is {nearest}")


@pytest.mark.parametrize("poles", [[0], [0.6], [39e3], [1e6, 100], [Root(1e6, 0.01), 0.1]])
def test_a_band_that_touches_a_root_or_holds_only_integrators_is_not(poles):
    assert _accept(_roots([], poles))[1] == ()
