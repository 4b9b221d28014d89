"""A vendor's op-amp model: what is let into a deck, and what the response with it says."""

import html
import re
from dataclasses import replace

import numpy as np
import pytest

from netlist import ngspice_worker
from netlist.cli.summary import EXIT_CODES
from netlist.deck import vendor_deck
from netlist.jobfile import parse_job
from netlist.records import all_notices, design_record, verdict_of
from netlist.report.page import report_page
from netlist.vendorlook import FOLLOWS, vendor_notices
from netlist.vendormodel import parse_model
from netlist.verification import verify
from synth.errors import JobError
from synth.evidence import response_error
from synth.nodal import compile_circuit
from tests.netlist import boards

PINS = ("out", "vcc", "minus", "vee", "plus")
MODEL = """\
* An invented amplifier; µ and ° may stand in comments
.param gain_bandwidth=5meg
.MODEL clamp D(is=1e-14
+ n=1.0)
.subckt INVENTED o p n m i   ; pins in an order of its own
Gstage 0 pole i n 1m
Rpole pole 0 100meg
Cpole pole 0
* a remark between a statement and its continuation
+ {1m/(6.283185307179586*gain_bandwidth)}
Dup pole p clamp
Ddown m pole clamp
Bout o 0 v=v(pole)
.ends INVENTED
"""


def parsed(text=MODEL, *, subcircuit="invented", pins=PINS):
    return parse_model(text, name="amp.lib", file="amp.lib", subcircuit=subcircuit, pins=pins)


@pytest.fixture(scope="module")
def design():
    return boards.design()


def with_model(design, model):
    return replace(
        design, job=replace(design.job, board=replace(design.job.board, vendor_model=model))
    )


def test_statements_are_joined_and_comments_dropped():
    cards = parsed().cards
    assert ".MODEL clamp D(is=1e-14 n=1.0)" in cards
    assert "Cpole pole 0 {1m/(6.283185307179586*gain_bandwidth)}" in cards
    assert ".subckt INVENTED o p n m i" in cards
    assert all(card.isascii() and "\n" not in card for card in cards)


def test_the_response_with_a_model_of_half_the_bandwidth_is_that_predicted(design, simulator):
    """The model has 5 MHz where the job has 10 MHz: what the nodal engine says of such op-amps
    against the job's own; the verdict is what it was without the model."""
    found = verify(with_model(design, parsed()), simulator=simulator)
    program = compile_circuit(design.circuit)
    expected = response_error(
        program.solve(found.frequency_hz, gain_bandwidth=5e6, open_loop_gain=1e5),
        program.solve(found.frequency_hz),
    )
    look = found.vendor
    assert look.failure is None
    np.testing.assert_allclose(look.difference.magnitude_db, expected.magnitude_db, atol=2e-5)
    np.testing.assert_allclose(look.difference.phase_deg, expected.phase_deg, atol=2e-4)
    assert expected.largest_deg > 0.01
    plain = verify(design, simulator=simulator).checks
    assert [c.name for c in found.checks] == [*(c.name for c in plain), FOLLOWS]
    assert found.checks[-1].passed
    # The output rises from one rail to the other.
    assert found.checks[-1].value == pytest.approx(24.0, rel=0.1)


def test_the_board_with_the_model_is_held_against_the_target(design, simulator):
    """Not against the one-pole model: the errors are those of the nodal engine's response with
    the model's figures against H(s), beside the limits of the job."""
    look = verify(with_model(design, parsed()), simulator=simulator).vendor
    program = compile_circuit(design.circuit)
    f = design.frequency_hz
    response = program.solve(f, gain_bandwidth=5e6, open_loop_gain=1e5)
    expected = response_error(response, design.wanted.response(f))
    magnitude, phase = look.against_target
    assert magnitude.value == pytest.approx(expected.largest_db, rel=1e-3)
    assert phase.value == pytest.approx(expected.largest_deg, rel=1e-3)
    accept = design.job.accept
    assert (magnitude.limit, phase.limit) == (accept.magnitude_db, accept.phase_deg)
    assert look.keeps_limits
    assert vendor_notices(look) == ()


SLOW = MODEL.replace("=5meg", "=50k")
DEAD = MODEL.replace("i n 1m", "i n 0")
NO_SUBCIRCUIT = MODEL.replace("Rpole pole 0 100meg", "Xpole pole 0 nowhere")
NO_DIODE = MODEL.replace("Dup pole p clamp", "Dup pole p other")
SWAPPED = ("out", "vcc", "plus", "vee", "minus")
OUT_ON_RAIL = ("vcc", "out", "minus", "vee", "plus")


def test_a_model_too_slow_for_the_limits_is_told_but_fails_nothing(design, simulator):
    made = with_model(design, parsed(SLOW))
    found = verify(made, simulator=simulator)
    assert not found.vendor.keeps_limits
    assert verdict_of(made, found) == "pass"
    (said,) = [n for n in all_notices(made, found) if "vendor" in n]
    assert "the board misses its limits of magnitude and phase" in said
    record = design_record(made, found)
    assert said in record["notices"]
    assert record["simulation"]["vendor_model"]["keeps_limits"] is False
    page = report_page(made, found, drawings=boards.drawings(), lines=())
    assert "<strong>does not keep its limits</strong>" in page
    assert "outside</td>" in page
    assert html.unescape(page).count(said) == 1


@pytest.mark.parametrize(
    ("text", "pins", "said"),
    [
        (DEAD, PINS, "hardly moves"),
        (MODEL, SWAPPED, "plus and minus are exchanged"),
        (MODEL.replace("v=v(pole)", "v=0.001*v(pole)"), PINS, "hardly moves"),
    ],
)
def test_a_model_whose_output_does_not_follow_its_plus_input_fails(
    design, simulator, text, pins, said
):
    """With plus and minus exchanged the AC response alone is as good as ever."""
    made = with_model(design, parsed(text, pins=pins))
    found = verify(made, simulator=simulator)
    check = found.checks[-1]
    assert check.name == FOLLOWS
    assert not check.passed
    assert said in check.note
    assert verdict_of(made, found) == "fail"
    assert EXIT_CODES[verdict_of(made, found)] == 1
    page = report_page(made, found, drawings=boards.drawings(), lines=())
    assert f"limits missed: {FOLLOWS}" in page


@pytest.mark.parametrize("offset", [-5e-3, 5e-3])
def test_an_offset_is_no_reason_to_fail(design, simulator, offset):
    text = MODEL.replace("Gstage 0 pole i n 1m", f"Voff i2 i {offset}\nGstage 0 pole i2 n 1m")
    found = verify(with_model(design, parsed(text)), simulator=simulator)
    assert found.checks[-1].passed


def test_a_board_without_a_response_is_told_in_words(design, simulator):
    """A dead output gives no decibels to print."""
    made = with_model(design, parsed(DEAD))
    found = verify(made, simulator=simulator)
    assert found.vendor.is_silent
    page = report_page(made, found, drawings=boards.drawings(), lines=())
    assert "shows no response at all" in page
    assert "by at most –" not in page


@pytest.mark.parametrize(
    ("text", "pins", "reason"),
    [
        (NO_SUBCIRCUIT, PINS, r"unknown subckt: .* nowhere"),
        (
            NO_DIODE,
            PINS,
            r"'other' from line; dup pole p other; .*find a valid modelname",
        ),
        (MODEL.replace("{1m", "{missing*1m"), PINS, r"Undefined parameter \[missing\]"),
        (MODEL, OUT_ON_RAIL, "Timestep too small"),
    ],
)
def test_a_model_that_cannot_be_simulated_is_told_and_fails(design, simulator, text, pins, reason):
    """Nothing shows that its output follows its input; the reason is what ngspice says, whole."""
    made = with_model(design, parsed(text, pins=pins))
    found = verify(made, simulator=simulator)
    assert found.failure is None
    look = found.vendor
    assert look.difference is None
    assert re.search(reason, look.failure)
    assert (look.follows.value, look.follows.passed) == (None, False)
    assert verdict_of(made, found) == "fail"
    record = design_record(made, found)
    assert record["simulation"]["vendor_model"] == {
        "failure": look.failure, "difference": None, "keeps_limits": None, "against_target": [],
    }  # fmt: skip
    (said,) = vendor_notices(look)
    assert look.failure in said
    assert said in record["notices"]
    page = report_page(made, found, drawings=boards.drawings(), lines=())
    assert "<strong>nothing is known</strong>" in page


def test_a_step_towards_the_operating_point_that_fails_is_no_failure(simulator):
    """ngspice reports singular matrices on the way to one it then finds."""
    message = "Trying gmin =   1.0000E-03 Warning: singular matrix:  check node x"
    assert ngspice_worker._HARMLESS.match(message)


def test_the_deck_has_rails_and_no_one_pole_model(design):
    deck = vendor_deck(
        design.circuit, parsed(), title="t", supply=(-12.0, 12.0),
        start_hz=10.0, stop_hz=1e4, points_per_decade=50,
    )  # fmt: skip
    assert "XU1 x1 _rail_high x1_s _rail_low 0 invented\n" in deck
    assert "Vrail_low _rail_low 0 DC -12.0\n" in deck
    assert "opamp_" not in deck


@pytest.mark.parametrize(
    ("line", "expected"),
    [
        (".control", "only .ends, .model, .param, .subckt and elements"),
        (".include other.lib", "only .ends"),
        (".INC 'other.lib'", "only .ends"),
        (".lib tt", "only .ends"),
        (".csparam a=1", "only .ends"),
        (".end", "only .ends"),
        ("*# shell ls", "no '\\*#'"),
        (" *#shell ls", "no '\\*#'"),
        ("Aread %v([a]) source", "only the elements"),
        ("Nosdi a b model", "only the elements"),
        ("shell ls", "only the elements"),
        ("Bx o 0 v=1 file=x", "nothing that opens a file"),
        (".model src filesource(\n+ FILE\n+ = x)", "nothing that opens a file"),
        (".model src d_source(input_file=x)", "nothing that opens a file"),
        ('.model src x("/etc/passwd")', "no double quote"),
        ("Rx o 0 `ls`", "no double quote, backquote"),
        ("Rx o 0 1\\", "no double quote, backquote or backslash"),
        ("Rµ o 0 1", "plain ASCII outside comments"),
        ("Rx o 0 \x1b[31m1", "plain ASCII outside comments"),
        ("Rx o 0 1\x85.control", "only .ends"),
        ("Rx o 0 1\u2028.control", "only .ends"),
        ("Rx o 0 1\r.control", "only .ends"),
        ("V1 a 0 dc 0 external", "a source of its own"),
        ("I1 a 0 EXTERNAL", "a source of its own"),
        ("V1 a 0 dc 0 trnoise(1m 1u 0 0)", "a source of its own"),
        ("V1 a 0 dc 0\n+ trrandom(2 10m 0 1)", "a source of its own"),
        ("R1 a 0 {agauss(1k,10,1)}", "values that are not drawn at random"),
        (".param r=gauss (1k,10,1)", "values that are not drawn at random"),
        (".param r={limit(1k,(1+2))}", "values that are not drawn at random"),
        ("B1 a 0 v=aunif(1,2)", "values that are not drawn at random"),
        ("include x", "only the elements"),
        ("include x y 1k", "only the elements"),
        ("lib x tt", "only the elements"),
        ("ends", "only the elements"),
        ("R(1) a 0 1k", "only the elements"),
        ("R1 a 0", "a name, nodes and a value or model, 4 words or more"),
        ("I1 a", "a name, nodes and a value or model, 3 words or more"),
        ("Q1 a b c", "a name, nodes and a value or model, 5 words or more"),
    ],
)
def test_a_statement_that_does_more_than_describe_is_refused_with_its_line(line, expected):
    text = MODEL.replace("Dup pole p clamp", f"{line}\nDup pole p clamp")
    with pytest.raises(JobError, match=rf"^model: amp\.lib:1[0-9]: got .*, expected {expected}"):
        parsed(text)


@pytest.mark.parametrize(
    "line",
    [
        "DC o p clamp",
        "Vsense a 0",
        "E1 a 0 VALUE={limit(v(i)-v(n), -1, max(1, 2))}",
        "F1 a 0 Vsense 2",
        "M1 a b p mos",
        "Vexternal external 0 1",
        "Rlimit a 0 {2*1k}",
    ],
)
def test_what_models_commonly_hold_is_let_in(line):
    assert line in parsed(MODEL.replace("Dup pole p clamp", f"{line}\nDup pole p clamp")).cards


@pytest.mark.parametrize(
    ("text", "problem"),
    [
        ("+ 1\n" + MODEL, "a statement before its continuation"),
        ("Rload 1 0 1k\n" + MODEL, "elements inside a .subckt alone"),
        (".ends\n" + MODEL, "a .subckt before it"),
        (MODEL + ".subckt more a b\n", "without its .ends"),
        (MODEL.replace("INVENTED", "OTHER"), "no subcircuit invented"),
        (MODEL.replace("p n m i ", "p n m "), "4 nodes of the subcircuit invented"),
        (".subckt\n" + MODEL, "a name after .subckt"),
        ("", "no subcircuit invented"),
    ],
)
def test_a_file_that_is_no_such_model_is_refused(text, problem):
    with pytest.raises(JobError, match=problem):
        parsed(text)


@pytest.mark.parametrize("pins", [("plus",), ("plus", "plus", "vcc", "vee", "out"), (*PINS, "nc")])
def test_each_pin_is_named_once(pins):
    with pytest.raises(JobError, match=r"pins: got .* expected each of plus, minus, vcc, vee, out"):
        parsed(pins=pins)


def test_parameters_of_a_subcircuit_are_no_nodes():
    for given in ("x=1", "params: x=1", "x = 1"):
        parsed(MODEL.replace("o p n m i ", f"o p n m i {given} "))


JOB = """
[target]
numerator = [1]
denominator = [1e-3, 1]
[signal]
band = ["1 Hz", "1 kHz"]
[board.op_amp]
model = "amp.lib"
subcircuit = "INVENTED"
pins = ["out", "vcc", "minus", "vee", "plus"]
"""


def test_a_job_names_a_model_beside_it_and_carries_its_text(tmp_path):
    (tmp_path / "amp.lib").write_text(MODEL, encoding="utf-8")
    job = parse_job(JOB, folder=tmp_path)
    assert job.board.vendor_model == parsed(subcircuit="INVENTED")
    assert dict(job.source.files) == {"amp.lib": MODEL}
    again = parse_job(JOB, files=dict(job.source.files))
    assert again.board.vendor_model == job.board.vendor_model


def test_a_model_stands_beside_figures_and_their_spread(tmp_path):
    """One table holds what is bought, what models it and how it is spread."""
    (tmp_path / "amp.lib").write_text(MODEL, encoding="utf-8")
    more = 'gain_bandwidth = "3 MHz"\ngain_bandwidth_spread = "30 %"\n'
    board = parse_job(JOB + more, folder=tmp_path).board
    assert board.op_amp.gain_bandwidth == 3e6
    assert board.population.gain_bandwidth_spread == pytest.approx(0.3)
    assert board.vendor_model == parsed(subcircuit="INVENTED")


def test_mistakes_of_a_job_with_a_model_name_the_key(tmp_path):
    (tmp_path / "amp.lib").write_text(MODEL.replace("Dup", ".control\nDup"), encoding="utf-8")
    with pytest.raises(
        JobError, match=r"board\.op_amp\.model: .*amp\.lib:11: got '\.control'"
    ) as found:
        parse_job(JOB, folder=tmp_path)
    assert found.value.exit_code == 2
    with pytest.raises(JobError, match="subcircuit missing, expected model, subcircuit and pins"):
        parse_job(JOB.replace('subcircuit = "INVENTED"\n', ""), folder=tmp_path)
    with pytest.raises(JobError, match="no such file, expected a SPICE model file"):
        parse_job(JOB.replace("amp.lib", "none.lib"), folder=tmp_path)
