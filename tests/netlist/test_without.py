"""What the options of a repick say, and what they refuse."""

from __future__ import annotations

import pytest

from netlist.without import read_references, read_shortage
from synth.errors import JobError
from synth.shortages import Shortage

KINDS = {"R7": "resistor", "C1": "capacitor"}


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("R7=11k3", Shortage(kind="resistor", value=11300.0, ref="R7")),
        (" r7 = 11.3 kohm ", Shortage(kind="resistor", value=11300.0, ref="R7")),
        ("C1=2n2", Shortage(kind="capacitor", value=2.2e-9, ref="C1")),
        ("E96 11k3", Shortage(kind="resistor", value=11300.0, source="E96")),
        ("e12 10 nF", Shortage(kind="capacitor", value=1e-8, source="E12")),
        ("stock 4k7", Shortage(kind="resistor", value=4700.0, source="stock")),
        ("11k3", Shortage(kind="resistor", value=11300.0)),
        ("10 nF", Shortage(kind="capacitor", value=1e-8)),
        ("11300", Shortage(kind="resistor", value=11300.0)),
    ],
)
def test_a_text_is_read_as_it_is_meant(text, expected) -> None:
    """The unit, or the part, decides the kind."""
    assert read_shortage(text, KINDS) == expected


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("R8=1k", "--without: got the part 'R8', expected one of R7, C1"),
        ("=1k", "--without: got the part '', expected one of R7, C1"),
        ("R7=", "--without: got '', expected a resistance"),
        ("R7=10 nF", "--without: got '10 nF', expected a resistance"),
        ("C1=1k", "--without: got '1k', expected a capacitance"),
        ("R7=-1k", "--without: got '-1k' with a sign"),
        ("R7=0", "--without: got '0', expected a value above zero"),
        ("E97 1k", "--without: got the series 'E97', expected one of E3"),
        ("E96", "--without: got 'E96', expected a text such as"),
        ("E96 much", "--without: got 'E96 much', expected a text such as"),
        ("much", "--without: got 'much', expected a text such as"),
        ("", "--without: got '', expected a text such as"),
    ],
)
def test_nonsense_is_refused_in_one_line(text, message) -> None:
    """What came, and what was expected."""
    with pytest.raises(JobError) as caught:
        read_shortage(text, KINDS)
    assert str(caught.value).startswith(message)
    assert "\n" not in str(caught.value)


def test_references_stand_between_spaces_or_commas() -> None:
    """In any case, each once."""
    assert read_references(" r1,R2  C3,R1 ") == ("R1", "R2", "C3")
    assert read_references("") == ()


def test_a_reference_alone_is_no_value() -> None:
    """``R7`` would be 0.7 ohm."""
    with pytest.raises(JobError, match="got 'r7' without a value, expected"):
        read_shortage("r7", {"R7": "resistor"})
