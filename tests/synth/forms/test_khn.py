"""The state-variable section: its three outputs, and the classical relations of its summer."""

from __future__ import annotations

from fractions import Fraction

import pytest

from synth.forms import realize
from synth.transfer import Factor, TransferFunction

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
