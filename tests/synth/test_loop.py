"""Margins and stability of loops against published values, python-control and closed-loop roots."""

from __future__ import annotations

import math
from dataclasses import replace

import control
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.errors import JobError
from synth.job import Loop
from synth.loop import checked_loop, loop_checks, loop_margins
from synth.transfer import Factor, TransferFunction
from tests.strategies import random_target

ONE = TransferFunction.from_factors(1, [Factor.real(-1)], [Factor.real(-1)])


def loop_of(num: list[float], den: list[float], delay: float = 0.0) -> Loop:
    return Loop(plant=TransferFunction.from_polynomials(num, den), delay=delay)


def test_published_margins() -> None:
    """L = 25/(s^3+10s^2+10s+10): gain margin 3.6, phase margin 29.110 deg at 1.78444 rad/s,
    disk margin 0.4581 (recomputed reference values), and python-control's margin."""
    found = loop_margins(loop_of([25], [1, 10, 10, 10]), ONE)
    assert 10 ** (found.gain_margin_db / 20) == pytest.approx(3.6, rel=1e-9)
    assert found.phase_margin_deg == pytest.approx(29.110, abs=5e-4)
    assert 2 * np.pi * found.crossover_hz == pytest.approx(1.78444, abs=5e-6)
    assert found.disk_margin == pytest.approx(0.4581, abs=2e-4)
    assert found.unstable_poles == 0
    gm, pm, _, wc = control.margin(control.tf([25], [1, 10, 10, 10]))
    assert 10 ** (found.gain_margin_db / 20) == pytest.approx(gm, rel=1e-6)
    assert found.phase_margin_deg == pytest.approx(pm, rel=1e-6)
    assert 2 * np.pi * found.crossover_hz == pytest.approx(wc, rel=1e-6)


@pytest.mark.parametrize(
    ("num", "den"),
    [
        ([25], [1, 10, 10, 10]),
        ([3, 3], [0.1, 1, 0, 0]),
        ([0.8], [1, 0.05, 1, 0]),
        ([2, 1], [1, 0.4, 4, 1]),
        ([40], [0.01, 1, 1]),
    ],
)
def test_disk_margin_is_that_of_python_control(num: list[float], den: list[float]) -> None:
    """python-control's `disk_margins`, balanced (skew 0), on a grid dense enough for 1e-4."""
    found = loop_margins(loop_of(num, den), ONE)
    stable = np.roots(np.polyadd(num, den)).real.max() < 0
    assert found.unstable_poles == (0 if stable else 2)
    if stable:
        disk, _, _ = control.disk_margins(control.tf(num, den), np.logspace(-2, 3, 20_001))
        assert found.disk_margin == pytest.approx(disk, rel=1e-4)
    else:
        assert found.disk_margin == 0


@pytest.mark.parametrize(("ratio", "lead"), [(3, 30), (4, 36.870), (5, 41.810), (10, 54.903)])
def test_a_lead_network_adds_its_largest_phase_to_the_margin(ratio: float, lead: float) -> None:
    """asin((a - 1)/(a + 1)) of a lead network of ratio a (textbook relation, from memory): with an
    integrator that crosses 1 where the phase of the network is largest."""
    root = math.sqrt(ratio)
    network = TransferFunction.from_polynomials([1, 1 / root], [1 / root, 1])
    found = loop_margins(loop_of([1], [1, 0]), network)
    assert 2 * np.pi * found.crossover_hz == pytest.approx(1, rel=1e-9)
    assert found.phase_margin_deg == pytest.approx(90 + lead, abs=6e-4)


def test_delay_is_exact() -> None:
    """An integrator of 1 rad/s with a delay of 0.5 s: phase margin 90 deg - 0.5 rad; gain
    margin pi / (2 * 0.5); and a delay of 2 s makes it unstable (limit pi/2)."""
    found = loop_margins(loop_of([1], [1, 0], delay=0.5), ONE)
    assert found.phase_margin_deg == pytest.approx(90 - np.degrees(0.5), rel=1e-9)
    assert 10 ** (found.gain_margin_db / 20) == pytest.approx(np.pi, rel=1e-9)
    assert found.unstable_poles == 0
    assert loop_margins(loop_of([1], [1, 0], delay=2.0), ONE).unstable_poles == 2


def test_no_crossing_is_none() -> None:
    """A loop that never reaches 1 has no crossover, and a first-order one no gain margin."""
    found = loop_margins(loop_of([0.5], [1, 1]), ONE)
    assert found.crossover_hz is None
    assert found.phase_margin_deg is None
    assert found.gain_margin_db is None


@settings(deadline=None, derandomize=True, max_examples=60)
@given(st.integers(1, 5), st.integers(0, 2**32 - 1), st.booleans(), st.floats(-1.5, 2.5))
def test_nyquist_count_is_that_of_the_closed_loop_roots(
    order: int, seed: int, integrate: bool, gain: float
) -> None:
    """Unstable closed-loop poles counted by the turning of 1 + L equal the roots of
    num + den in the right half-plane, open-loop unstable plants included."""
    rng = np.random.default_rng(seed)
    plant = random_target(rng, order, decades=1.5, from_hz=0.1)
    poles = [*plant.pole_factors, Factor.real(-40.0)]
    if integrate:
        poles.append(Factor.real(0))
    if seed % 3 == 0:
        poles.append(Factor.real(1.3))
    zeros = [z for z in plant.zero_factors if z.natural_frequency]
    plant = TransferFunction.from_factors(float(plant.gain) * 10**gain * 40, zeros, poles)
    num = [float(c) for c in plant.numerator]
    den = [float(c) for c in plant.denominator]
    roots = np.roots(np.polyadd(num, den))
    if np.min(np.abs(roots.real) / np.abs(roots)) < 1e-3:
        return
    found = loop_margins(Loop(plant=plant), ONE)
    assert found.unstable_poles == int(np.sum(roots.real > 0))


@settings(deadline=None, derandomize=True, max_examples=40)
@given(
    st.integers(0, 2**32 - 1),
    st.sampled_from([-0.95, -0.4, 0.1, 0.95]),
    st.sampled_from([0.02, 1.0, 30.0]),
)
def test_the_count_is_right_for_loops_that_do_not_end_at_zero(
    seed: int, end: float, plant_gain: float
) -> None:
    """A plant and a compensator with as many zeros as poles, P H of any sign below 1 at high
    frequencies and of any size elsewhere: the roots of num + den in the right half-plane."""
    rng = np.random.default_rng(seed)
    zeros, poles = (-(10 ** rng.uniform(-1, 2, size=4)) for _ in range(2))
    zeros *= rng.choice([-1, 1], size=4, p=[0.3, 0.7])
    gains = (plant_gain, end / plant_gain)
    plant, target = (
        TransferFunction.from_factors(
            gain, [Factor.real(z) for z in zeros[part]], [Factor.real(p) for p in poles[part]]
        )
        for gain, part in zip(gains, (slice(2), slice(2, 4)), strict=True)
    )
    num = float(plant.gain * target.gain) * np.poly(zeros)
    roots = np.roots(np.polyadd(num, np.poly(poles)))
    if np.min(np.abs(roots.real) / np.abs(roots)) < 1e-3:
        return
    found = loop_margins(Loop(plant=plant), target)
    assert found.unstable_poles == int(np.sum(roots.real > 0))


@pytest.mark.parametrize("end", [-0.5, -0.8])
def test_where_a_negative_loop_ends_is_a_gain_margin(end: float) -> None:
    """1 + k L for L = end (s + 0.5)/(s + 1), which is half as large at DC, loses its stability
    where k end passes -1."""
    found = loop_margins(loop_of([end, end / 2], [1, 1]), ONE)
    assert found.gain_margin_db == pytest.approx(-20 * math.log10(-end), rel=1e-6)


@pytest.mark.parametrize("end", [-3.0, -1.0, 1.0, 2.5])
def test_a_loop_that_never_falls_below_one_is_refused(end: float) -> None:
    """L = end (s + 3)/(s + 2): its closed loop as it is written is stable for end = -3, and any
    lag or delay at all makes it unstable; for a positive end the op-amps decide."""
    loop = loop_of([end], [1.0])
    target = TransferFunction.from_polynomials([1, 3], [1, 2])
    with pytest.raises(JobError, match=rf"L = P H that tends to {end:g} at high frequencies"):
        checked_loop(loop, target)
    checked_loop(loop_of([0.9], [1.0]), TransferFunction.from_polynomials([1, 3], [1, 2]))


@pytest.mark.parametrize("gain", [59.99, 59.99999, 60.00001, 60.01])
def test_a_loop_next_to_its_stability_limit_is_counted_right(gain: float) -> None:
    """gain / ((s+1)(s+2)(s+3)) is stable below 60 (Routh); the turning of 1 + L is resolved
    however sharp it is, and the disk margin goes to zero with the gain margin."""
    found = loop_margins(loop_of([gain], [1, 6, 11, 6]), ONE)
    assert found.unstable_poles == (0 if gain < 60 else 2)
    assert found.gain_margin_db == pytest.approx(20 * np.log10(60 / gain), rel=1e-6)
    assert found.phase_margin_deg * (60 - gain) > 0
    if gain < 60:
        # At the crossing L = -gain/60; L passes -1 at a slant, so the least is below.
        bound = 2 * (60 - gain) / (60 + gain)
        assert 0.3 * bound < found.disk_margin <= bound * (1 + 1e-6)
    else:
        assert found.disk_margin == 0


@pytest.mark.parametrize("damping", [1e-2, 1e-3, 1e-5])
def test_the_disk_margin_of_a_ringing_closed_loop_is_found(damping: float) -> None:
    """L = 1/(s^2 + 2 damping s + 100): the closed loop rings where L has no pole, at
    w^2 = 101; against a dense sweep there."""
    found = loop_margins(loop_of([1], [1, 2 * damping, 100]), ONE)
    w = np.sqrt(101) * (1 + np.linspace(-20, 20, 400_001) * damping)
    loop = 1 / (100 - w * w + 2j * damping * w)
    assert found.disk_margin == pytest.approx(np.min(np.abs(2 * (1 + loop) / (1 - loop))), rel=1e-4)


def test_gain_that_may_not_fall_is_a_gain_margin() -> None:
    """1.2/(s - 1) needs a gain above 1, a drop of 1.58 dB is all it has; and a conditionally
    stable loop of three integrators may fall by the margin that python-control gives."""
    found = loop_margins(loop_of([1.2], [1, -1]), ONE)
    assert found.unstable_poles == 0
    assert found.gain_may_fall
    assert found.gain_margin_db == pytest.approx(20 * np.log10(1.2), rel=1e-9)
    num, den = [4.0, 8.0, 4.0], [0.001, 1.0, 0.0, 0.0, 0.0]
    found = loop_margins(loop_of(num, den), ONE)
    assert found.unstable_poles == 0
    assert found.gain_may_fall
    gm = control.stability_margins(control.tf(num, den))[0]
    assert found.gain_margin_db == pytest.approx(-20 * np.log10(gm), rel=1e-6)
    check = loop_checks(replace(loop_of(num, den), gain_margin_db=20.0), found)[2]
    assert not check.passed
    assert check.note == "of a gain that falls"


def test_phase_is_a_distance_either_way_in_a_stable_loop() -> None:
    """A delayed resonance that crosses 1 on its way up at -202 deg and turns through -360 deg
    harmlessly: 22 deg of lead, not of lag, would be too much, and they are its margin."""
    loop = loop_of([0.1], [1, 0.02, 1], delay=np.radians(200.0))
    found = loop_margins(loop, ONE)
    assert found.unstable_poles == 0
    s = 2j * np.pi * found.crossover_hz
    phase = np.angle(-0.1 * np.exp(-s * loop.delay) / (s * s + 0.02 * s + 1), deg=True)
    assert -30 < phase < -5
    assert found.phase_margin_deg == pytest.approx(-phase, rel=1e-6)


@settings(deadline=None, derandomize=True, max_examples=40)
@given(st.integers(1, 4), st.integers(0, 2**32 - 1), st.floats(-1.0, 1.5))
def test_margins_are_those_of_a_second_library(order: int, seed: int, gain: float) -> None:
    """python-control takes the crossings nearest to 0 dB and to 0 deg, of either sign."""
    plant = random_target(np.random.default_rng(seed), order, decades=1.5, from_hz=0.1)
    zeros = [z for z in plant.zero_factors if z.natural_frequency]
    poles = [*plant.pole_factors, Factor.real(-20.0)]
    plant = TransferFunction.from_factors(float(plant.gain) * 10**gain * 20, zeros, poles)
    num, den = ([float(c) for c in p] for p in (plant.numerator, plant.denominator))
    found = loop_margins(Loop(plant=plant), ONE)
    gm, pm, *_ = control.stability_margins(control.tf(num, den))
    if found.phase_margin_deg is not None:
        assert abs(found.phase_margin_deg) == pytest.approx(abs(pm), rel=1e-4, abs=1e-4)
    if found.gain_margin_db is not None:
        assert found.gain_margin_db == pytest.approx(abs(20 * np.log10(gm)), rel=1e-4) or (
            found.unstable_poles
        )


@pytest.mark.parametrize("seed", range(40))
def test_a_plant_that_swings_undamped_is_counted(seed: int) -> None:
    """Pairs of poles on the imaginary axis in the plant: damped or driven by the closed loop,
    as the roots say; with real poles, one at the origin and one in the right half-plane."""
    rng = np.random.default_rng(seed)

    def w() -> float:
        return float(10 ** rng.uniform(0, 2))

    poles = [Factor.pair(w(), np.inf) for _ in range(rng.integers(1, 3))]
    poles += [Factor.real(-w()) for _ in range(rng.integers(0, 3))]
    poles += [Factor.real(0)] * (seed % 3 == 0) + [Factor.real(3.0)] * (seed % 5 == 0)
    count = int(rng.integers(0, sum(p.degree for p in poles)))
    zeros = [Factor.real(float(rng.choice([-1, 1])) * w()) for _ in range(count)]
    scale = float(np.prod([p.natural_frequency or 1.0 for p in poles]))
    plant = TransferFunction.from_factors(
        float(rng.choice([-1, 1])) * scale * float(10 ** rng.uniform(-1, 2)), zeros, poles
    )
    num, den = ([float(c) for c in p] for p in (plant.numerator, plant.denominator))
    roots = np.roots(np.polyadd(num, den))
    if np.min(np.abs(roots.real) / np.abs(roots)) > 1e-3:
        assert loop_margins(Loop(plant=plant), ONE).unstable_poles == np.sum(roots.real > 0)


@pytest.mark.parametrize("times", [1, 2])
def test_a_cancelled_pole_at_the_origin_stays_unstable(times: int) -> None:
    """A plant that blocks DC hides the integrator of H(s) from L, not from the board."""
    plant = TransferFunction.from_factors(
        1, [Factor.real(0)] * times, [Factor.real(-3.0)] * (times + 1)
    )
    target = TransferFunction.from_factors(1, [Factor.real(-1.0)] * times, [Factor.real(0)] * times)
    assert loop_margins(Loop(plant=plant), target).unstable_poles == times


def test_a_delayed_loop_that_stays_above_one_is_not_called_stable() -> None:
    """2 exp(-s/1000) (s + 10)/s has unstable poles without end."""
    target = TransferFunction.from_polynomials([1, 10], [1, 0])
    found = loop_margins(loop_of([2], [1], delay=1e-3), target)
    assert found.unstable_poles is None
    assert not found.is_stable


@pytest.mark.parametrize("leak", [1e-7, 1e-4])
def test_the_board_of_a_double_integrator_is_counted_as_one(leak: float) -> None:
    """Finite gain moves the two poles at the origin to -leak; the count does not hang on
    whether the grid reaches below that."""
    target = TransferFunction.from_polynomials([1, 20, 100], [1, 0, 0])
    loop = loop_of([10], [1, 1])

    def board(f: np.ndarray) -> np.ndarray:
        s = 2j * np.pi * f
        return (s * s + 20 * s + 100) / (s + leak) ** 2

    assert loop_margins(loop, target).unstable_poles == 0
    assert loop_margins(loop, target, board).unstable_poles == 0


def test_a_pair_of_poles_on_the_axis_is_no_crossing() -> None:
    """Across it L changes the signs of both its parts at once: a grid that straddles it must
    not take that for a passage of -180 deg."""
    for f0 in (344.99427464588877, 100.0, 1e3):
        w0 = 2 * np.pi * f0
        plant = TransferFunction.from_factors(0.05 * w0**2, [], [Factor.pair(w0, np.inf)])
        lead = TransferFunction.from_factors(1, [Factor.real(-w0 / 3)], [Factor.real(-3 * w0)])
        found = loop_margins(Loop(plant=plant), lead)
        assert found.unstable_poles == 0
        assert found.gain_margin_db is None or found.gain_margin_db < 300


@pytest.mark.parametrize("gain", [50.0, 300.0])
@pytest.mark.parametrize("sign", [1, -1])
def test_turns_count_from_where_the_phase_of_a_leaky_integrator_follows(
    gain: float, sign: int
) -> None:
    """L = P H with H = 1/s and a board of (s + 40)/(s + 30)/(s + 1e-3), a third off but at high
    frequencies, or inverted: as many unstable poles as the roots of the closed loop say."""
    plant = TransferFunction.from_polynomials([gain], [1, 11, 10])
    target = TransferFunction.from_polynomials([1], [1, 0])

    def board(frequency_hz: np.ndarray) -> np.ndarray:
        s = 2j * np.pi * frequency_hz
        return sign * (s + 40) / (s + 30) / (s + 1e-3)

    num = sign * gain * np.array([1.0, 40.0])
    closed = np.polyadd(np.polymul(np.polymul([1, 11, 10], [1, 1e-3]), [1, 30]), num)
    expected = int(np.sum(np.roots(closed).real > 0))
    assert loop_margins(Loop(plant=plant), target, board).unstable_poles == expected
