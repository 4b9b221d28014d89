"""design.json holds what the contract with scripts says, in numbers JSON knows."""

from __future__ import annotations

import json
import math
from dataclasses import replace

import numpy as np
import pytest

from netlist.records import all_checks, design_record, record_text, verdict_of
from synth.evidence import Check
from tests.netlist import boards

MADE = boards.design()
CHECKED = boards.verification(MADE)


def refuse(name):
    raise AssertionError(f"{name} is not JSON")


def parsed(design, verification):
    return json.loads(record_text(design_record(design, verification)), parse_constant=refuse)


def test_the_keys_scripts_rely_on_are_there():
    record = parsed(MADE, CHECKED)
    assert record["format"] == 1
    assert record["title"] == MADE.job.title
    assert record["form"] == "controllable"
    assert record["inverted"] is False
    assert record["verdict"] == "pass"
    assert record["yield"].items() >= {"boards": 60, "passed": 52, "frequencies": 121}.items()
    assert record["nominal"]["rms_error"] == pytest.approx(MADE.nominal.rms, rel=1e-12)
    assert record["nominal"]["nearest_rms_error"] > record["nominal"]["rms_error"]
    assert record["noise"] == {
        "band_hz": [10.0, 10e3],
        "output_rms_v": MADE.noise.output_rms,
    }


def test_the_target_gives_h_back():
    record = parsed(MADE, CHECKED)["target"]
    s = 2j * np.pi * MADE.frequency_hz
    h = np.polyval(record["numerator"], s) / np.polyval(record["denominator"], s)
    np.testing.assert_allclose(h, MADE.job.target.response(MADE.frequency_hz), rtol=1e-12)


def test_components_describe_every_part_of_the_board_and_nothing_else():
    components = {c["ref"]: c for c in parsed(MADE, CHECKED)["components"]}
    assert components["R4"] == {
        "ref": "R4",
        "kind": "resistor",
        "value": 16200.0,
        "ideal": MADE.circuit.by_ref["R4"].ideal,
        "series": "E96",
        "tolerance": 0.01,
        "fixed": False,
        "nets": ["x1", "x2_s"],
        "sets": "coupling from x1 into x2",
    }
    assert components["U2"]["kind"] == "op_amp"
    assert components["U2"]["nets"] == ["0", "x2_s", "out"]
    assert components["U2"]["value"] is None
    assert len(components) == len(MADE.circuit.bought) + len(MADE.circuit.amplifiers)


def test_the_load_is_under_surroundings():
    made = MADE.circuit
    load = replace(made.passives[0], ref="RLOAD", nets=("out", "0"), value=1e4, rule=None)
    loaded = replace(MADE, circuit=replace(made, passives=(*made.passives, load)))
    record = parsed(loaded, CHECKED)
    assert [p["ref"] for p in record["surroundings"]] == ["RLOAD"]
    assert "RLOAD" not in {c["ref"] for c in record["components"]}


def test_numbers_that_are_not_finite_become_null():
    swing = replace(MADE.swings[0], slew=math.inf)
    drift = replace(MADE.drifts[0], rate=float("nan"))
    record = parsed(replace(MADE, swings=(swing,), drifts=(drift,)), CHECKED)
    assert record["swing"][0]["slew"] is None
    assert record["drift"][0]["rate"] is None


def test_a_value_json_has_no_word_for_is_refused_not_guessed():
    with pytest.raises(TypeError, match="got a complex"):
        record_text({"x": 1j})


def test_unverified_keeps_both_checks_without_a_value_and_without_a_pass():
    record = parsed(MADE, boards.verification(MADE, failure="no ngspice"))
    assert record["verdict"] == "unverified"
    named = {c["name"]: c for c in record["checks"]}
    for name in ("magnitude error", "phase error"):
        assert named[name]["value"] is None
        assert named[name]["passed"] is False
    assert record["simulation"]["failure"] == "no ngspice"


def test_checks_of_the_simulation_come_first_and_decide_too():
    assert [c.name for c in all_checks(MADE, CHECKED)][:2] == ["magnitude error", "phase error"]
    missed = replace(MADE, checks=(Check("peak at U1", 1.0, 2.0, "V", False),))
    assert verdict_of(MADE, CHECKED) == "pass"
    assert verdict_of(missed, CHECKED) == "fail"
