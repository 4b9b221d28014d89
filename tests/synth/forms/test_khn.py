"""The state-variable section: its three outputs, and the classical relations of its summer."""

from __future__ import annotations

from fractions import Fraction

import pytest

from synth.forms import realize
from synth.polarity import choose_polarity
from synth.transfer import Factor, TransferFunction
from tests.synth.forms.biquads import F0, W0, frequency_and_q, low_pass, unscaled

F = Fraction


@pytest.mark.parametrize(
    ("zeros", "output"), [([], "x2"), ([0], "x1"), ([0, 0], "h1"), ([-50], "y1"), ([-50, 0], "y1")]
)
def test_a_numerator_of_one_term_is_one_of_the_three_outputs(zeros: list[int], output: str) -> None:
    """Low-pass, band-pass and high-pass need no adder behind the loop."""
    target = TransferFunction.from_factors(
        3, [Factor.real(z) for z in zeros], [Factor.pair(F(40), F(5))]
    )
    graph = realize(target, "khn")
    assert graph.output == output
    assert len(graph.blocks) == (4 if output == "y1" else 3)


def test_the_loop_has_the_weights_of_the_textbook() -> None:
    """Integrators of the rate w0 and -1, -1/Q back into the summer."""
    target = TransferFunction.from_factors(1600, [], [Factor.pair(F(40), F(5))])
    h, x1, x2 = realize(target, "khn").blocks
    assert {t.source: t.weight for t in h.terms} == {"in": 1, "x1": F(-1, 5), "x2": -1}
    assert [t.weight for t in x1.terms] == [40]
    assert [t.weight for t in x2.terms] == [40]


def test_slow_op_amps_lower_the_frequency_less_than_in_other_loops() -> None:
    """With e = f0/GBW to first order dw0/w0 is about -0.9 e at Q = 10, and Q becomes Q/(1 - 4 Q e)
    at high Q, equal R and C throughout (published for the circuit of Kerwin, Huelsman and Newcomb
    1967, from memory)."""
    e, q = 1e-6, 10.0
    circuit = unscaled(low_pass(q), "khn", gain_bandwidth=F0 / e)
    assert [c.kind for c in circuit.cells] == ["difference", "integrator", "integrator"]
    w, found = frequency_and_q(circuit)
    assert (w - 1) / e == pytest.approx(-0.9, abs=0.06)
    assert (1 - q / found) / e == pytest.approx(4 * q, rel=0.01)


@pytest.mark.parametrize("zeros", [[], ["origin"], ["origin"] * 2, ["left"], ["notch"]])
def test_three_op_amps_do_for_a_single_output_and_four_for_a_sum(zeros: list[str]) -> None:
    """No inverter: what would need one goes to the other input of the summer."""
    kinds = {
        "origin": Factor.real(0),
        "left": Factor.real(-3e3),
        "notch": Factor.pair(5e3, float("inf")),
    }
    target = TransferFunction.from_factors(1, [kinds[z] for z in zeros], [Factor.pair(W0, 5)])
    polarity = choose_polarity(realize(target, "khn"))
    assert polarity.inverters == ()
    assert not polarity.output_inverted
