"""Every form against published numbers of whole responses."""

from __future__ import annotations

import control
import numpy as np
import pytest

from synth.forms import FORMS
from synth.statespace import StateSpace
from synth.transfer import TransferFunction
from tests.forms import realized
from tests.strategies import butterworth

# Denominators of the Pade approximation of a delay of 1 s, descending powers of s (recomputed
# by python-control below).
PADE = {
    1: [1, 2],
    2: [1, 6, 12],
    3: [1, 12, 60, 120],
    4: [1, 20, 180, 840, 1680],
}

# Noise bandwidth of a Butterworth low-pass over its corner, by order: S. Winder, "Analog and
# Digital Filter Design".
NOISE_BANDWIDTH = {1: 1.570796, 2: 1.110721, 3: 1.047198, 4: 1.026172, 5: 1.016641, 6: 1.011515}


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("order", PADE)
def test_a_delay_passes_all_frequencies_alike(form: str, order: int) -> None:
    """The approximation is an all-pass whose delay at DC is 1 s."""
    denominator = PADE[order]
    numerator = [c * (-1) ** (order - k) for k, c in enumerate(denominator)]
    theirs = control.pade(1, order)
    np.testing.assert_allclose(np.array(theirs[1]) / theirs[1][0], denominator, rtol=1e-9)
    np.testing.assert_allclose(np.array(theirs[0]) / theirs[1][0], numerator, rtol=1e-9)
    graph = realized(TransferFunction.from_polynomials(numerator, denominator), form)
    found = graph.at(1j * np.geomspace(1e-3, 1e3, 40))
    np.testing.assert_allclose(np.abs(found), 1.0, rtol=1e-9)
    step = 1e-4
    assert -np.angle(graph.at(1j * step)) / step == pytest.approx(1.0, rel=1e-6)


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("order", NOISE_BANDWIDTH)
def test_noise_bandwidth_of_a_butterworth_is_the_published_one(form: str, order: int) -> None:
    """The integral of |H|^2 from the Gramian of the form's own states: L2^2 = 2 B."""
    graph = realized(butterworth(order, 1e3), form)
    signals = graph.signals(2j * np.pi * np.geomspace(10, 1e5, 100))
    even = {n: 1 / np.max(np.abs(v)) for n, v in signals.items() if n != graph.output}
    system = StateSpace.of_signals(graph.rescaled(even), (graph.output,))
    bandwidth = float(system.l2_norms()[0]) ** 2 / 2
    assert bandwidth / 1e3 == pytest.approx(NOISE_BANDWIDTH[order], abs=2e-6)
