"""Margins and stability of loops against published values, python-control and closed-loop roots."""

from __future__ import annotations

import control
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.job import Loop
from synth.loop import loop_margins
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
