"""The Tow-Thomas loop: equal integrators, structure of its taps, and its error by slow op-amps."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from synth.forms import realize
from synth.transfer import Factor, TransferFunction
from tests.synth.forms.biquads import F0, W0, frequency_and_q, low_pass, unscaled

F = Fraction


def test_the_integrators_are_equal_and_their_product_exact() -> None:
    """Both rates next to w0 = 6283.185..., which is no rational; their product w0^2 itself."""
    graph = realize(low_pass(7), "tow_thomas")
    x1, x2 = graph.blocks
    w = {t.source: t.weight for t in x2.terms}["x1"]
    k = {t.source: t.weight for t in x1.terms}["x2"]
    assert float(w) == pytest.approx(W0, rel=1e-15)
    assert w * -k == F(W0) ** 2


@pytest.mark.parametrize(
    ("zeros", "output", "blocks"),
    [([], "x2", 2), ([0], "x1", 2), ([-50], "x1", 2), ([0, 0], "y1", 3), ([-50, 0], "y1", 3)],
)
def test_each_numerator_has_its_tap(zeros: list[int], output: str, blocks: int) -> None:
    """Low-pass: the second integrator; band-pass: the lossy one; an adder with two zeros only,
    and the input goes nowhere for a coefficient that is zero."""
    target = TransferFunction.from_factors(
        3, [Factor.real(z) for z in zeros], [Factor.pair(F(40), F(5))]
    )
    graph = realize(target, "tow_thomas")
    assert graph.output == output
    assert len(graph.blocks) == blocks
    assert len(graph.readers("in")) == np.count_nonzero([float(c) for c in target.numerator])


@pytest.mark.parametrize("poles", [(0, -9), (0, 0), (5, -9), (-4, -4)])
@pytest.mark.parametrize("zeros", [[], ["pair"], [-3]])
def test_real_poles_anywhere_make_a_section(poles: tuple[int, int], zeros: list[object]) -> None:
    """At the origin, in the right half-plane, double: H(s) all the same."""
    made = [Factor.pair(F(7), F(3)) if z == "pair" else Factor.real(F(-3)) for z in zeros]
    target = TransferFunction.from_factors(2, made, [Factor.real(F(p)) for p in poles])
    s = np.array([0.3j, 4j + 1, 30.0])
    for form in ("tow_thomas", "khn", "normal"):
        np.testing.assert_allclose(realize(target, form).at(s), target.at(s), rtol=1e-12)


@pytest.mark.parametrize("q", [2.0, 10.0])
def test_slow_op_amps_lower_the_frequency_and_raise_q(q: float) -> None:
    """With e = f0/GBW to first order dw0/w0 = -1.5 e and, at high Q, Q becomes Q / (1 - 4 Q e),
    equal R and C throughout (published for the circuit of Tow 1968 and Thomas 1971, from memory);
    what high Q neglects is half of e."""
    e = 1e-5
    circuit = unscaled(low_pass(q), "tow_thomas", gain_bandwidth=F0 / e)
    assert len(circuit.amplifiers) == 3
    w, found = frequency_and_q(circuit)
    assert (w - 1) / e == pytest.approx(-1.5, rel=0.01)
    assert (1 - q / found) / e == pytest.approx(4 * q, abs=0.51)
