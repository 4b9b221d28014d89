"""What a cascade is for: levels that use the rail, and scatter that does not grow."""

from __future__ import annotations

import math

import numpy as np
import pytest

from synth.candidates import sketch_form
from synth.grid import judging_frequencies
from synth.scaling.constraints import ceilings
from synth.transfer import Factor, TransferFunction
from tests.jobs import job_for
from tests.strategies import butterworth

TWO_PI = 2 * math.pi


def unit_gain(poles: list[Factor]) -> TransferFunction:
    """A low-pass of gain 1 at 0 Hz."""
    plain = TransferFunction.from_factors(1, [], poles)
    return TransferFunction.from_factors(float(1 / abs(plain.at(0j))), [], poles)


def scatter(target: TransferFunction, band_hz: tuple[float, float], form: str) -> float:
    """Largest predicted standard deviation over the band [dB], the default board."""
    job = job_for(target, band_hz)
    return sketch_form(job, form, judging_frequencies(target, band_hz)).spread_db


def test_section_outputs_peak_alike_where_bandwidth_and_slew_cost_nothing() -> None:
    """A Butterworth filter far below the op-amps' bandwidth: both inner section outputs end up
    within 2 dB of the rail and so of each other; the output itself is what H(s) makes it."""
    target = butterworth(6, 1e3)
    job = job_for(target, (10.0, 1e3))
    sketch = sketch_form(job, "cascade", np.geomspace(10.0, 1e3, 100))
    top = ceilings(job, sketch.peaks)
    shares = [sketch.levels[name] / top[name] for name in ("x2", "x4")]
    assert all(10 ** (-2 / 20) <= share <= 0.9001 for share in shares)
    assert sketch.levels["x6"] == 1.0


@pytest.mark.parametrize("form", ["controllable", "observable"])
def test_companion_forms_scatter_more_the_more_real_poles_stand_in_a_row(form: str) -> None:
    """Poles at 100 Hz, 200 Hz, ..., as the roots of Wilkinson's polynomial: predicted scatter
    over the lowest third of them twice the cascade's at order 8, four times at order 12."""
    ratios = []
    for order in (8, 12):
        target = unit_gain([Factor.real(-TWO_PI * 100 * k) for k in range(1, order + 1)])
        band = (1.0, 100.0 * order / 3)
        ratios.append(scatter(target, band, form) / scatter(target, band, "cascade"))
    assert ratios[0] > 2
    assert ratios[1] > 4


@pytest.mark.parametrize("form", ["controllable", "observable"])
def test_companion_forms_are_hopeless_for_resonances_in_a_row(form: str) -> None:
    """Pairs of Q = 5 at 100 Hz, 200 Hz, ...: six times the cascade's scatter at order 8, forty
    times at order 12, some 70 dB: the coefficients of the product say little of its roots."""
    ratios = []
    for order in (8, 12):
        pairs = [Factor.pair(TWO_PI * 100 * k, 5) for k in range(1, order // 2 + 1)]
        band = (10.0, 50.0 * order)
        target = unit_gain(pairs)
        ratios.append(scatter(target, band, form) / scatter(target, band, "cascade"))
    assert ratios[0] > 6
    assert ratios[1] > 40
