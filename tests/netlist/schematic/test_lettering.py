"""What must hold of text: its box holds it, whatever it says."""

from __future__ import annotations

from dataclasses import replace

import pytest

from netlist.schematic.lettering import ascent, descent, value_text, width, wrapped
from tests.netlist.schematic import boards

SAMPLES = ["R12 10K2", "C3 4µ7", "x12_n", "inverter: −in", "U10", "+12 V and −12 V", "WMQ@ gj|y"]


@pytest.mark.parametrize("text", SAMPLES)
@pytest.mark.parametrize("bold", [False, True])
def test_the_box_holds_what_the_face_itself_measures(text, bold):
    """Against the outlines of DejaVu Sans, as the plotting library ships it."""
    from matplotlib.font_manager import FontProperties
    from matplotlib.textpath import TextPath

    face = FontProperties(family="DejaVu Sans", weight="bold" if bold else "normal")
    outline = TextPath((0, 0), text, size=100, prop=face).get_extents()
    assert outline.width <= width(text, 100, bold=bold) + 0.5
    assert outline.width >= 0.7 * width(text, 100, bold=bold)
    if "|" not in text and "@" not in text:
        assert outline.y1 <= ascent(100)
        assert -outline.y0 <= descent(100)


def test_a_text_is_broken_at_spaces_and_loses_no_word():
    text = "one two three four five six seven"
    lines = wrapped(text, 10, 60)
    assert " ".join(lines) == text
    assert all(width(line, 10) <= 60 for line in lines)
    assert len(lines) > 2


def test_a_word_too_long_is_cut():
    lines = wrapped("a" * 40, 10, 50)
    assert "".join(lines) == "a" * 40
    assert all(width(line, 10) <= 50 for line in lines)


def test_standard_values_are_marked_and_others_rounded():
    part = boards.first_order().by_ref["R1"]
    assert value_text(replace(part, value=10200.0)) == "10K2"
    assert value_text(replace(part, value=10234.567)) == "10.23 kohm"
