"""The worst board within tolerance: ngspice on that very board, and what pack and page say."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from netlist.deck import board_deck
from netlist.records import design_record
from netlist.report.worst import covered, shown, worst_line, worst_sentence
from synth.evidence import response_error
from synth.population import PartSpread, Population
from synth.worstcase import WorstError, worst_case
from tests.netlist import boards

MADE = boards.design()
WORST = worst_case(
    MADE.circuit,
    MADE.wanted.response(MADE.frequency_hz),
    MADE.frequency_hz,
    target=MADE.wanted,
)
DESIGN = replace(MADE, worst=WORST)
PLAIN = Population()


@pytest.mark.parametrize("unit", ["dB", "deg"])
def test_ngspice_finds_the_error_that_is_said_to_be_reached(simulator, unit):
    error = WORST.magnitude_db if unit == "dB" else WORST.phase_deg
    low, high = MADE.job.signal.band_hz
    deck = board_deck(
        MADE.circuit.with_values(error.values),
        title="worst",
        start_hz=low,
        stop_hz=high,
        points_per_decade=100,
    )
    found = simulator.ac(deck, ["out"])
    against = response_error(found.voltages["out"], MADE.wanted.response(found.frequency_hz))
    signed = against.magnitude_db if unit == "dB" else against.phase_deg
    there = np.interp(np.log(error.frequency_hz), np.log(found.frequency_hz), signed)
    assert error.sign * there == pytest.approx(error.reached, rel=2e-3)
    # No frequency of ngspice's own sweep shows more than the bound of the whole band.
    assert np.abs(signed).max() <= error.everywhere * (1 + 2e-3)


def test_the_record_holds_reached_and_bound():
    record = design_record(DESIGN, boards.verification(DESIGN))["worst_case"]
    for key, error in (("magnitude_db", WORST.magnitude_db), ("phase_deg", WORST.phase_deg)):
        assert record[key]["reached"] == error.reached
        assert record[key]["reached"] <= record[key]["bound"] == error.bound
        assert record[key]["bound"] <= record[key]["everywhere"] == error.everywhere
        assert record[key]["unlimited"] is None
        assert record[key]["meet"] is True
        assert set(record[key]["values"]) == {p.ref for p in MADE.circuit.bought}
    assert record["frequencies"] == MADE.frequency_hz.size


def test_every_part_is_named_at_its_end_once():
    for line, error in zip(
        shown(DESIGN)["lines"], (WORST.magnitude_db, WORST.phase_deg), strict=True
    ):
        named = [word.strip(",;") for word in line.split() if word.strip(",;.") in error.values]
        assert sorted(named) == sorted(error.values)


def one(**changes) -> WorstError:
    """An error of 0.4 dB."""
    known = {
        "unit": "dB",
        "reached": 0.4,
        "sign": -1,
        "bound": 0.40101,
        "frequency_hz": 1000.0,
        "values": {"R1": 10e3},
        "low": (),
        "high": (),
        "between": ("R1",),
    }
    return WorstError(**(known | changes))


def test_a_bound_is_rounded_up_and_a_missing_one_is_told():
    both = replace(WORST, magnitude_db=one(), phase_deg=one(unit="deg", bound=None))
    assert worst_line(both, PLAIN) == (
        "0.400 dB (none above 0.402 at the judged frequencies), 0.400 deg or more"
    )
    whole = replace(both, magnitude_db=one(everywhere=0.41001))
    assert worst_line(whole, PLAIN).startswith("0.400 dB (none above 0.411 in the whole band), ")
    told = shown(replace(DESIGN, worst=both))
    assert told["wide"] == ["phase"]
    assert told["rows"][1]["bound"] == "–"


@pytest.mark.parametrize(
    ("what", "words"),
    [("pole", "a pole reaches the imaginary axis"), ("zero", "the response vanishes")],
)
def test_an_error_without_limit_is_told_as_proven(what, words):
    none = one(bound=None, reached=280.0, unlimited=what)
    both = replace(WORST, magnitude_db=none)
    assert worst_line(both, PLAIN).startswith(f"dB without limit (within tolerance {words}), ")
    told = shown(replace(DESIGN, worst=both))
    assert "which is proven" in told["lines"][0]
    assert words in told["lines"][0]
    assert told["rows"][0]["reached"] == "no limit"
    assert told["wide"] == []
    record = design_record(replace(DESIGN, worst=both), boards.verification(DESIGN))
    assert record["worst_case"]["magnitude_db"]["unlimited"] == what


def test_a_part_between_its_ends_is_told_with_its_value():
    sentence = worst_sentence("magnitude", one(), MADE.circuit)
    assert sentence.startswith("The magnitude error of −0.400 dB at 1.00\xa0kHz")
    assert sentence.endswith("R1 at 10.00\xa0kΩ.")


def test_what_the_worst_case_leaves_out_of_the_population_is_told():
    """The range of temperatures is in it, the spread of op-amps is not."""
    warm = PartSpread(temperature_coefficient=1e-4)
    hot = Population(resistors=warm, temperature=(0.0, 70.0))
    assert covered(PLAIN) == []
    assert "temperatures is in it" in covered(hot)[0]
    loose = Population(gain_bandwidth_spread=0.3)
    assert "may be beyond" in covered(loose)[0]
    assert worst_line(WORST, loose) == worst_line(WORST, PLAIN) + "; op-amps at their figures"
