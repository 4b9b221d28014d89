"""A vendor's op-amp model: what is let into a deck, and what the response with it says."""

from dataclasses import replace

import numpy as np
import pytest

from netlist.deck import vendor_deck
from netlist.jobfile import parse_job
from netlist.records import design_record
from netlist.report.page import report_page
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
    assert found.vendor_failure is None
    np.testing.assert_allclose(found.vendor.magnitude_db, expected.magnitude_db, atol=2e-5)
    np.testing.assert_allclose(found.vendor.phase_deg, expected.phase_deg, atol=2e-4)
    assert expected.largest_deg > 0.01
    assert [c.name for c in found.checks] == [
        c.name for c in verify(design, simulator=simulator).checks
    ]


def test_a_model_that_cannot_be_simulated_is_told_and_fails_nothing(design, simulator):
    """A subcircuit that is not there, within the model."""
    broken = MODEL.replace("Rpole pole 0 100meg", "Xpole pole 0 nowhere")
    made = with_model(design, parsed(broken))
    found = verify(made, simulator=simulator)
    assert found.failure is None
    assert found.vendor is None
    assert found.vendor_failure
    record = design_record(made, found)["simulation"]["vendor_model"]
    assert record == {"failure": found.vendor_failure, "difference": None}
    page = report_page(made, found, drawings=boards.drawings(), lines=())
    assert "nothing came of it" in page


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
        ("Rx o 0\x85.control", "only .ends"),
        ("Rx o 0\u2028.control", "only .ends"),
        ("Rx o 0\r.control", "only .ends"),
    ],
)
def test_a_statement_that_does_more_than_describe_is_refused_with_its_line(line, expected):
    text = MODEL.replace("Dup pole p clamp", f"{line}\nDup pole p clamp")
    with pytest.raises(JobError, match=rf"^model: amp\.lib:1[0-9]: got .*, expected {expected}"):
        parsed(text)


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
