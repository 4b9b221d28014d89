"""Job files: every key is read, every default holds, every mistake is told in one clear line."""

from __future__ import annotations

import math
import re
import subprocess
import sys
import tomllib
from fractions import Fraction
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from netlist.jobfile import LARGEST_FILE, parse_job, read_job
from netlist.mistakes import lines_of_keys, telling_lines
from synth.errors import CircuitError, JobError, RealizationError
from synth.job import Accept, Job
from synth.op_amps import OP_AMP_CLASSES
from synth.targets import Root, from_coefficients, from_expression, from_roots

REST = """
[signal]
input_peak = "2 V"
band = ["1 Hz", "20 kHz"]
swing = "any"
source_resistance = "50 ohm"
load = "10 kohm"
[board]
supply = ["-5 V", "12 V"]
form = "cascade"
inverted = "either"
[board.resistors]
series = "E24"
tolerance = "0.1 %"
smallest = "2k2"
largest = "470 kohm"
[board.capacitors]
series = "E6"
tolerance = 0.02
smallest = "1 nF"
largest = "220n"
[board.op_amp]
kind = "precision"
gain_bandwidth = "12 MHz"
slew_rate = "5 V/us"
open_loop_gain = "120 dB"
offset = "50 µV"
bias_current = "2 nA"
voltage_noise = "6 nV/rtHz"
current_noise = "0.3 pA/rtHz"
swing_headroom = "1.2 V"
output_current = "15 mA"
supply_current = "3 mA"
[accept]
magnitude = "0.25 dB"
phase = "2 deg"
yield = "99 %"
[loop]
numerator = [25]
denominator = [1, 10, 10, 10]
delay = "50 us"
phase_margin = "45 deg"
gain_margin = "6 dB"
"""
COEFFICIENTS = """
title = "A lead of invented figures"
[target]
numerator = [0.1, 40]
denominator = [1e-4, 1]
"""
ROOTS = """
[target]
zeros = ["120 Hz", {frequency = "1 kHz", q = 0.8}]
poles = ["50 Hz", {frequency = "2 kHz", q = 0.7}, "8 kHz"]
gain = 40
gain_at = "10 Hz"
"""
EXPRESSION = """
[target]
expression = "40*(1 + s/wz)/(s*(1 + s/wp))"
[target.parameters]
wz = "2*pi*120"
wp = 5e4
"""
SHORT = """
[target]
numerator = [1]
denominator = [0.001, 1]
[signal]
band = ["1 Hz", "1 kHz"]
"""


def short(**changes: str) -> str:
    """The shortest job with tables replaced or added, by their TOML."""
    tables = {
        "top": "",
        "target": "[target]\nnumerator = [1]\ndenominator = [0.001, 1]",
        "signal": "[signal]\nband = ['1 Hz', '1 kHz']",
    }
    return "\n".join((tables | changes).values()) + "\n"


def refusal(text: str) -> str:
    """The message `text` is refused with."""
    with pytest.raises(JobError, match=r"^bad\.toml") as caught:
        parse_job(text, name="bad.toml")
    return str(caught.value)


# What is read


@pytest.mark.parametrize("target", [COEFFICIENTS, ROOTS, EXPRESSION])
def test_every_key_of_the_job_file_reaches_the_job(target):
    job = parse_job(target + REST)
    signal, board, loop = job.signal, job.board, job.loop
    assert signal.band_hz == (1.0, 20e3)
    assert (signal.input_peak, signal.swing) == (2.0, "any")
    assert (signal.source_resistance, signal.load) == (50.0, 10e3)
    assert (board.supply, board.form, board.inverted) == ((-5.0, 12.0), "cascade", "either")
    rule = board.resistors
    assert (rule.kind, rule.series, rule.tolerance) == ("resistor", "E24", 0.001)
    assert (rule.smallest, rule.largest) == (2.2e3, 470e3)
    rule = board.capacitors
    assert (rule.kind, rule.series, rule.tolerance) == ("capacitor", "E6", 0.02)
    assert (rule.smallest, rule.largest) == (1e-9, 220e-9)
    amp = board.op_amp
    assert (amp.kind, amp.gain_bandwidth, amp.slew_rate) == ("precision", 12e6, 5e6)
    assert (amp.open_loop_gain, amp.offset, amp.bias_current) == (1e6, 50e-6, 2e-9)
    assert (amp.voltage_noise, amp.current_noise, amp.swing_headroom) == (6e-9, 0.3e-12, 1.2)
    assert (amp.output_current, amp.supply_current) == (15e-3, 3e-3)
    assert job.accept == Accept(magnitude_db=0.25, phase_deg=2.0, yield_share=0.99)
    assert loop is not None
    assert loop.plant == from_coefficients([25], [1, 10, 10, 10])
    assert (loop.delay, loop.phase_margin_deg, loop.gain_margin_db) == (50e-6, 45.0, 6.0)


def test_every_default_is_the_documented_one():
    job = parse_job(SHORT)
    assert job.title == "untitled"
    signal, board = job.signal, job.board
    assert (signal.input_peak, signal.swing) == (1.0, "sine")
    assert (signal.source_resistance, signal.load) == (0.0, None)
    assert (board.supply, board.form, board.inverted) == ((-12.0, 12.0), "auto", "no")
    rule = board.resistors
    assert (rule.kind, rule.series, rule.tolerance) == ("resistor", "E96", 0.01)
    assert (rule.smallest, rule.largest) == (1e3, 1e6)
    rule = board.capacitors
    assert (rule.kind, rule.series, rule.tolerance) == ("capacitor", "E12", 0.05)
    assert (rule.smallest, rule.largest) == (100e-12, 1e-6)
    assert board.op_amp == OP_AMP_CLASSES["general purpose"]
    assert job.accept == Accept(magnitude_db=0.5, phase_deg=3.0, yield_share=None)
    assert job.loop is None


def test_margins_and_delay_of_a_loop_may_be_left_out():
    loop = parse_job(SHORT + "[loop]\nnumerator = [1]\ndenominator = [1, 1]").loop
    assert loop is not None
    assert (loop.delay, loop.phase_margin_deg, loop.gain_margin_db) == (0.0, None, None)


def test_coefficients_stay_exact():
    job = parse_job(COEFFICIENTS + "[signal]\nband = ['1 Hz', '1 kHz']")
    assert job.title == "A lead of invented figures"
    # (0.1 s + 40) / (0.0001 s + 1), the denominator made monic.
    assert job.target.numerator == (Fraction(1000), Fraction(400000))
    assert job.target.denominator == (Fraction(1), Fraction(10000))


def test_roots_are_read_with_their_half_plane_and_q():
    text = """
    [target]
    zeros = ["-3 kHz", 0, {frequency = "1 kHz", q = inf}]
    poles = [50, {q = 0.7, frequency = 2e3}, {frequency = "0.1 Hz", q = "0.5"}]
    gain = "-20 dB"
    gain_at = "300 Hz"
    [signal]
    band = [1, 1000]
    """.replace('1 kHz"\n    [sig', '300 Hz"\n    [sig')
    zeros = [Root(Fraction(-3000)), Root(Fraction(0)), Root(Fraction(1000), math.inf)]
    poles = [
        Root(Fraction(50)),
        Root(Fraction(2000), Fraction(7, 10)),
        Root(Fraction(1, 10), Fraction(1, 2)),
    ]
    expected = from_roots(zeros, poles, Fraction(0.1), Fraction(300))
    found = parse_job(text).target
    assert found.denominator == expected.denominator
    assert found.numerator == expected.numerator


@pytest.mark.parametrize("at", ["", "gain_at = 'dc'", "gain_at = 0", "gain_at = '0 Hz'"])
def test_gain_is_meant_at_dc_unless_stated(at):
    target = parse_job(short(target=f"[target]\npoles = ['1 kHz']\ngain = -3\n{at}")).target
    assert complex(target.at(0)) == pytest.approx(-3.0, rel=1e-12, abs=0)


@pytest.mark.parametrize("at", ["'inf'", "inf"])
def test_gain_may_be_meant_at_infinity(at):
    text = f"[target]\nzeros = [0]\npoles = ['1 kHz']\ngain = 3\ngain_at = {at}"
    assert parse_job(short(target=text)).target.gain == 3


def test_an_expression_with_parameters_is_read_exactly():
    target = parse_job(EXPRESSION + "[signal]\nband = ['1 Hz', '20 kHz']").target
    parameters = {"wz": "2*pi*120", "wp": Fraction(50000)}
    expected = from_expression("40*(1 + s/wz)/(s*(1 + s/wp))", parameters)
    assert target.numerator == expected.numerator
    f = np.array([1.0, 100.0, 1e4])
    s = 2j * np.pi * f
    by_hand = 40 * (1 + s / (2 * np.pi * 120)) / (s * (1 + s / 5e4))
    np.testing.assert_allclose(target.response(f), by_hand, rtol=1e-12, atol=0)


def test_what_the_target_gives_notice_of_reaches_the_job():
    text = short(target="[target]\nnumerator = [1, 1000]\ndenominator = [1, 3000, 2000000]")
    job = parse_job(text)
    assert job.target.order == 1
    assert len(job.notices) == 1
    assert "cancel" in job.notices[0]


def test_poles_in_the_right_half_plane_pass_only_when_allowed():
    text = "[target]\nnumerator = [1]\ndenominator = [1, -1000]"
    assert "allow_unstable" in refusal(short(target=text))
    job = parse_job(short(target=f"{text}\nallow_unstable = true"))
    assert complex(job.target.poles[0]) == 1000


def test_a_class_may_be_taken_as_it_is_or_changed_in_one_figure():
    job = parse_job(short(board="[board.op_amp]\nkind = 'wideband'"))
    assert job.board.op_amp == OP_AMP_CLASSES["wideband"]
    amp = parse_job(short(board="[board.op_amp]\noffset = 0")).board.op_amp
    assert (amp.kind, amp.offset, amp.gain_bandwidth) == ("general purpose", 0.0, 10e6)


def test_a_file_is_read_whatever_its_line_ends_and_byte_order_mark(tmp_path):
    path = tmp_path / "lead.toml"
    path.write_bytes(b"\xef\xbb\xbf" + (COEFFICIENTS + REST).replace("\n", "\r\n").encode())
    job = read_job(path)
    assert isinstance(job, Job)
    assert job == parse_job(COEFFICIENTS + REST)


# What is refused: one line, exactly

ONE_LINE = [
    # unknown keys
    ({"top": "titel = 'x'"}, ":1: titel: unknown key 'titel'; did you mean 'title'?"),
    (
        {"board": "[board.resitors]"},
        ":7: board.resitors: unknown key 'resitors'; did you mean 'resistors'?",
    ),
    (
        {"board": "[board.resistors]\nserie = 'E96'"},
        ":8: board.resistors.serie: unknown key 'serie'; did you mean 'series'?",
    ),
    (
        {"accept": "[accept]\nband = 1"},
        ":8: accept.band: unknown key 'band'; did you mean 'signal.band'?",
    ),
    (
        {"accept": "[accept]\nmagnitude_db = 1"},
        ":8: accept.magnitude_db: unknown key 'magnitude_db'; did you mean 'magnitude'?",
    ),
    (
        {"accept": "[accept]\nxyzzy = 1"},
        ":8: accept.xyzzy: unknown key 'xyzzy', expected one of magnitude, phase, yield",
    ),
    (
        {"accept": '[accept]\n"a\\nb" = 1'},
        ":7: accept.'a\\nb': unknown key 'a\\nb', expected one of magnitude, phase, yield",
    ),
    # tables and their absence
    ({"target": ""}, ": target: is missing, expected a table [target] that states H(s)"),
    (
        {"signal": ""},
        ": signal: is missing, expected a table [signal] with band = ['1 Hz', '20 kHz']",
    ),
    (
        {"signal": "[signal]"},
        ":5: signal.band: is missing, expected two frequencies such as ['1 Hz', '20 kHz']",
    ),
    (
        {"loop": "[loop]\nnumerator = [1]"},
        ":7: loop.denominator: is missing, expected a list of coefficients, descending powers of s",
    ),
    ({"signal": "", "top": "signal = 3"}, ":1: signal: got 3, expected a table [signal]"),
    ({"top": "loop = 'x'"}, ":1: loop: got 'x', expected a table [loop]"),
    (
        {"board": "[board]\nop_amp = 'precision'"},
        ":8: board.op_amp: got 'precision', expected a table [board.op_amp]",
    ),
    # wrong types
    ({"top": "title = 3"}, ":1: title: got 3, expected a text in quotes"),
    ({"top": "title = true"}, ":1: title: got true, expected a text in quotes"),
    ({"title": "[title]"}, ":7: title: got a table, expected a text in quotes"),
    ({"top": f"title = '{'x' * 201}'"}, ":1: title: got 201 characters, expected at most 200"),
    (
        {"top": 'title = "a\\n.control"'},
        ":1: title: got 'a\\n.control', expected one line without control characters",
    ),
    (
        {"board": "[board.resistors.series]"},
        ":7: board.resistors.series: got a table, expected a text in quotes",
    ),
    (
        {"signal": "[signal]\nband = ['1 Hz', '1 kHz']\nload = true"},
        ":7: signal.load: got true, expected a resistance such as '4.7 kohm' or '4k7'",
    ),
    (
        {"signal": "[signal]\nband = ['1 Hz', '1 kHz']\nload = 2020-01-01"},
        ":7: signal.load: got 2020-01-01, expected a resistance such as '4.7 kohm' or '4k7'",
    ),
    (
        {"signal": "[signal]\nband = ['1 Hz', '1 kHz']\n[signal.load]"},
        ":7: signal.load: got a table, expected a resistance such as '4.7 kohm' or '4k7'",
    ),
    (
        {"signal": "[signal]\nband = ['1 Hz', '1 kHz']\ninput_peak = '-2 V'"},
        ":7: signal.input_peak: got '-2 V' with a sign, expected a voltage such as '2 V' or '5 mV'",
    ),
    (
        {"signal": "[signal]\nband = ['1 Hz', '1 kHz']\ninput_peak = nan"},
        ":7: signal.input_peak: got NaN, expected a voltage such as '2 V' or '5 mV'",
    ),
    # values
    (
        {"signal": "[signal]\nband = '1 kHz'"},
        ":6: signal.band: got '1 kHz', expected the lowest and the highest frequency such as "
        "['1 Hz', '20 kHz']",
    ),
    (
        {"signal": "[signal]\nband = ['1 Hz', '1 kV']"},
        ":6: signal.band: got '1 kV', expected a frequency such as '50 Hz' or '1 MHz'",
    ),
    (
        {"signal": "[signal]\nband = ['1 kHz', '1 Hz']"},
        ":6: signal.band: got 1000 Hz to 1 Hz, expected 0 < lowest < highest",
    ),
    (
        {"signal": "[signal]\nband = ['1 Hz', '1 kHz']\nswing = 'square'"},
        ":7: signal.swing: got 'square', expected 'sine' or 'any'",
    ),
    (
        {"board": "[board]\nsupply = '12 V'"},
        ":8: board.supply: got '12 V', expected two rails such as '±12 V' or ['-5 V', '12 V']",
    ),
    (
        {"board": "[board]\nsupply = ['0 V', '12 V']"},
        ":8: board.supply: got rails of 0 V and 12 V, expected one below and one above ground",
    ),
    (
        {"board": "[board]\ninverted = 'maybe'"},
        ":8: board.inverted: got 'maybe', expected 'no', 'yes' or 'either'",
    ),
    (
        {"board": "[board]\ninverted = true"},
        ":8: board.inverted: got true, expected a text in quotes",
    ),
    (
        {"board": "[board.resistors]\nseries = 'E7'"},
        ":8: board.resistors.series: got the series 'E7', expected one of E3, E6, E12, E24, E48, "
        "E96, E192",
    ),
    (
        {"board": "[board.resistors]\nsmallest = '1.01k'\nlargest = '1.04k'\nseries = 'E3'"},
        ":7: board.resistors: got no value of E3 from 1.01 kohm to 1.04 kohm, expected a wider "
        "range",
    ),
    (
        {"board": "[board.capacitors]\nlargest = '1 pF'"},
        ":7: board.capacitors: got a range from 1e-10 to 1e-12 F, expected 0 < smallest < largest",
    ),
    (
        {"board": "[board.capacitors]\ntolerance = '150 %'"},
        ":7: board.capacitors: got a tolerance of 1.5, expected 0 to below 100 %",
    ),
    (
        {"board": "[board.capacitors]\ntolerance = 5"},
        ":8: board.capacitors.tolerance: got 5, expected a percentage such as '1 %' or a plain "
        "ratio such as 0.01",
    ),
    (
        {"board": "[board.op_amp]\nkind = 'presicion'"},
        ":8: board.op_amp.kind: got the class 'presicion', expected one of general purpose, "
        "precision, JFET input, wideband; did you mean 'precision'?",
    ),
    (
        {"board": "[board.op_amp]\ngain_bandwidth = 0"},
        ":8: board.op_amp.gain_bandwidth: got 0.0, expected a positive number",
    ),
    (
        {"board": "[board.op_amp]\nswing_headroom = '12 V'"},
        ":8: board.op_amp.swing_headroom: got 12 V of headroom on rails of -12 V and 12 V, "
        "expected room for a signal",
    ),
    (
        {"accept": "[accept]\nyield = 99"},
        ":8: accept.yield: got 99, expected a percentage such as '1 %' or a plain ratio such as "
        "0.01",
    ),
    (
        {"accept": "[accept]\nyield = '0 %'"},
        ":8: accept.yield: got 0 %, expected above 0 and up to 100 %",
    ),
    (
        {"accept": "[accept]\nmagnitude = '3 deg'"},
        ":8: accept.magnitude: got '3 deg', expected a level such as '0.5 dB'",
    ),
    (
        {"loop": "[loop]\nnumerator = [1]\ndenominator = [1, 1]\ndelay = '-1 us'"},
        ":10: loop.delay: got '-1 us' with a sign, expected a time such as '50 us'",
    ),
    (
        {"loop": "[loop]\nnumerator = [1, 2, 3]\ndenominator = [1, 100]"},
        ":8: loop.numerator: got 2 zeros and 1 pole, expected a plant with no more zeros than "
        "poles",
    ),
    # the target
    (
        {"target": "[target]"},
        ":2: target: got no H(s), expected numerator and denominator, or zeros, poles and gain, "
        "or expression",
    ),
    (
        {"target": "[target]\nnumerator = [1]\nexpression = '1/s'"},
        ":2: target: got numerator with expression, expected exactly one way: numerator and "
        "denominator, or zeros, poles and gain, or expression",
    ),
    (
        {"target": "[target]\nnumerator = [1]"},
        ":2: target: got numerator without denominator, expected both",
    ),
    (
        {"target": "[target]\npoles = ['1 Hz']"},
        ":2: target: got poles without gain, expected both",
    ),
    (
        {"target": "[target]\nparameters = {a = 1}"},
        ":2: target: got parameters without expression, expected both",
    ),
    (
        {"target": "[target]\nnumerator = [1]\ndenominator = []"},
        ":4: target.denominator: got a list of 0, expected a list of coefficients, descending "
        "powers of s",
    ),
    (
        {"target": "[target]\nnumerator = [1]\ndenominator = [1, nan]"},
        ":4: target.denominator: entry 2: got NaN, expected a finite number",
    ),
    (
        {"target": "[target]\nnumerator = [1]\ndenominator = [1, '2']"},
        ":4: target.denominator: entry 2: got '2', expected a finite number",
    ),
    (
        {"target": "[target]\nnumerator = [1]\ndenominator = [1, true]"},
        ":4: target.denominator: entry 2: got true, expected a finite number",
    ),
    (
        {"target": "[target]\nnumerator = [1]\ndenominator = [1, 1e999999999]"},
        ":4: target.denominator: entry 2: got 1E+999999999, expected a finite number",
    ),
    (
        {"target": f"[target]\nnumerator = [1]\ndenominator = {[1] * 34}"},
        ":4: target.denominator: got 34 entries, expected at most 33",
    ),
    (
        {"target": "[target]\nnumerator = 1\ndenominator = [1, 1]"},
        ":3: target.numerator: got 1, expected a list of coefficients, descending powers of s",
    ),
    (
        {"target": "[target]\nallow_unstable = 'no'\nnumerator = [1]\ndenominator = [1, 1]"},
        ":3: target.allow_unstable: got 'no', expected true or false",
    ),
    (
        {"target": "[target]\npoles = ['1 Hz', '1 V']\ngain = 1"},
        ":3: target.poles: entry 2: got '1 V', expected a frequency such as '50 Hz' or '1 MHz'",
    ),
    (
        {"target": "[target]\npoles = [{frequency = '1 Hz', Q = 1}]\ngain = 1"},
        ":3: target.poles: entry 1: unknown key 'Q', expected one of frequency, q",
    ),
    (
        {"target": "[target]\npoles = [{freq = '1 Hz', q = 1}]\ngain = 1"},
        ":3: target.poles: entry 1: unknown key 'freq'; did you mean 'frequency'?",
    ),
    (
        {"target": "[target]\npoles = [{q = 1}]\ngain = 1"},
        ":3: target.poles: entry 1: got no frequency, expected a table such as {frequency = "
        "'1 kHz', q = 2}",
    ),
    (
        {"target": "[target]\npoles = [{frequency = 0, q = 1}]\ngain = 1"},
        ":3: target.poles: entry 1: got a q at a frequency of 0, expected a frequency that is not "
        "0, or no q",
    ),
    (
        {"target": "[target]\npoles = [{frequency = 1, q = -1}]\ngain = 1"},
        ":3: target.poles: entry 1: got q = -1, expected a positive number or inf (a negative "
        "frequency puts a pair into the right half-plane)",
    ),
    (
        {"target": "[target]\npoles = ['1 Hz']\ngain = 1\ngain_at = 'DC!'"},
        ":5: target.gain_at: got 'DC!', expected a frequency such as '50 Hz' or '1 MHz', 'dc' or "
        "'inf'",
    ),
    (
        {"target": "[target]\npoles = ['1 Hz']\ngain = nan"},
        ":4: target.gain: got NaN, expected a plain ratio such as 2.5 or a level such as '100 dB'",
    ),
    (
        {"target": "[target]\nexpression = 3"},
        ":3: target.expression: got 3, expected an expression in quotes",
    ),
    (
        {"target": "[target]\nexpression = '1/(s+a)'\n[target.parameters]\na = [1]"},
        ":4: target.parameters: 'a': got a list of 1, expected a finite number or an expression",
    ),
]


@pytest.mark.parametrize(("changes", "message"), ONE_LINE)
def test_a_mistake_is_told_in_one_line_with_its_place(changes, message):
    assert refusal(short(**changes)) == f"bad.toml{message}"


def test_the_error_carries_the_key_path():
    with pytest.raises(JobError, match="expected a level") as caught:
        parse_job(short(accept="[accept]\nmagnitude = 'x'"))
    assert caught.value.key == "accept.magnitude"
    assert caught.value.exit_code == 2


def test_all_mistakes_are_told_at_once_one_a_line():
    text = short(
        top="titel = 'x'",
        accept="[accept]\nmagnitude = '3 deg'\nyield = true",
        board="[board.op_amp]\noffset = '1 A'",
    )
    lines = refusal(text).split("\n")
    assert len(lines) == 4
    assert all(re.match(r"bad\.toml:\d+: [a-z._]+: ", line) for line in lines)


def test_mistakes_found_after_reading_are_told_at_once_too():
    text = short(
        signal="[signal]\nband = ['1 kHz', '1 Hz']",
        board="[board]\nform = 'fractal'\n[board.resistors]\nseries = 'E7'",
        accept="[accept]\nphase = '0 deg'",
    )
    found = [line.split(": ")[1] for line in refusal(text).split("\n")]
    assert found == ["signal.band", "board.resistors.series", "board.form", "accept.phase"]


def test_a_form_that_does_not_exist_is_refused_with_those_there_are():
    message = refusal(short(board="[board]\nform = 'fractal'"))
    assert message.startswith("bad.toml:8: board.form: got 'fractal', expected auto, controllable")


# What the target itself refuses comes with its key path and line


@pytest.mark.parametrize(
    ("target", "start", "words"),
    [
        ("numerator = [0]\ndenominator = [1, 1]", ":3: target.numerator: ", "zero"),
        ("numerator = [1]\ndenominator = [0]", ":4: target.denominator: ", "zero"),
        ("numerator = [1, 0, 0]\ndenominator = [1, 1]", ": target", "pole"),
        ("numerator = [1]\ndenominator = [2]", ": target", "pole"),
        (
            f"numerator = [1]\ndenominator = {[math.comb(13, k) for k in range(14)]}",
            ": target",
            "12",
        ),
        ("poles = ['1 Hz']\ngain = 0", ":4: target.gain: ", "0"),
        ("poles = [0]\ngain = 1", ": target", "origin"),
        ("poles = [{frequency = '1 Hz', q = inf}]\ngain = 1", ": target", "imaginary axis"),
        ("expression = ''", ":3: target.expression: ", ""),
    ],
)
def test_a_target_that_cannot_be_built_is_refused_with_its_place(target, start, words):
    first = refusal(short(target=f"[target]\n{target}")).split("\n")[0]
    assert re.match(r"bad\.toml:[2345]: target[a-z_.]*: ", first)
    assert start.removeprefix(":") in first
    assert words in first


def test_an_expression_is_shown_with_a_caret_under_the_character():
    lines = refusal(short(target="[target]\nexpression = '40*(1 + s/)'")).split("\n")
    assert len(lines) == 3
    assert re.fullmatch(r"bad\.toml:3: target\.expression: .* at character 11", lines[0])
    assert lines[0].count("at character") == 1
    assert lines[1] == "    40*(1 + s/)"
    assert lines[2] == "    " + " " * 10 + "^"


def test_the_caret_holds_its_place_in_an_expression_of_several_lines():
    lines = refusal(short(target='[target]\nexpression = """\n1/(s\n+ )"""')).split("\n")
    assert lines[1] == "    1/(s + )"
    assert lines[2].index("^") == 4 + 7


def test_of_a_long_expression_only_what_stands_around_the_character_is_shown():
    long = "1/(s + 1)" + " + 1/(s + 1)" * 40
    cut = long[:200] + "?" + long[200:]
    lines = refusal(short(target=f"[target]\nexpression = '{cut}'")).split("\n")
    assert len(lines) == 3
    assert len(lines[1]) < 100
    assert lines[1].lstrip().startswith("...")
    assert lines[1].endswith("...")
    assert lines[1][lines[2].index("^")] == "?"


def test_a_parameter_that_does_not_exist_is_refused():
    message = refusal(short(target="[target]\nexpression = '1/(s + wx)'"))
    assert "wx" in message.split("\n")[0]


# Files and TOML


def test_a_syntax_error_names_line_and_column():
    assert refusal("[target\n") == (
        "bad.toml:1: expected ']' at the end of a table declaration at column 8, expected TOML"
    )
    assert refusal("a = 1\na = 2\n").startswith("bad.toml:2: ")


@pytest.mark.parametrize(
    "text",
    [
        "a = [1, 2",
        "a = 'x",
        "a",
        "= 1",
        "a = 1e",
        "a = 2020-13-45",
        "\x00",
        "a = " + "9" * 5000,
        "a = " + "[" * 5000,
        "a = 1e99999999999999999999999",
        "[a]\n[a]",
        "a = {b = 1",
    ],
)
def test_what_is_no_toml_is_refused_in_one_line(text):
    message = refusal(text)
    assert "\n" not in message
    assert len(message) < 200


@settings(deadline=None, derandomize=True, max_examples=100)
@given(junk=st.text(max_size=40), at=st.integers(0, len(SHORT)))
def test_any_text_gives_a_job_or_a_job_error(junk, at):
    try:
        assert isinstance(parse_job(SHORT[:at] + junk + SHORT[at:]), Job)
    except JobError as error:
        assert str(error).startswith("job")


def test_a_file_that_is_not_there_is_refused(tmp_path):
    path = tmp_path / "none.toml"
    with pytest.raises(JobError, match=f"^{re.escape(str(path))}: no such file, expected a job"):
        read_job(path)


def test_a_folder_and_a_device_are_refused(tmp_path):
    with pytest.raises(
        JobError, match=f"^{re.escape(str(tmp_path))}: got a folder, expected a job"
    ):
        read_job(tmp_path)
    with pytest.raises(JobError, match=r"^/dev/zero: got no regular file, expected a job file$"):
        read_job("/dev/zero")


def test_a_name_no_file_can_have_is_refused():
    with pytest.raises(JobError, match=r"^'a\\x00b': cannot be read: "):
        read_job("a\x00b")
    with pytest.raises(JobError, match=r"^'x{57}\.\.\.': cannot be read: "):
        read_job("x" * 5000)


def test_text_that_is_not_utf_8_is_refused(tmp_path):
    path = tmp_path / "latin.toml"
    path.write_bytes("title = 'µ'".encode("latin-1"))
    with pytest.raises(JobError, match=r"got a byte 0xb5 at position 9, expected text in UTF-8$"):
        read_job(path)


def test_a_file_above_a_megabyte_is_refused(tmp_path):
    path = tmp_path / "huge.toml"
    path.write_text(SHORT + "#" * LARGEST_FILE)
    with pytest.raises(JobError, match="more than 1000000 "):
        read_job(path)


@pytest.mark.parametrize("text", ["", "\n# to be written\n"])
def test_an_empty_file_is_told_what_is_missing_in_one_message(tmp_path, text):
    path = tmp_path / "empty.toml"
    path.write_text(text)
    with pytest.raises(JobError, match=r"empty.toml: got a job without a key, .* \[target\] ") as e:
        read_job(path)
    assert "\n" not in str(e.value)


@pytest.mark.parametrize(
    ("error", "line"),
    [
        (RealizationError("board.fixed.R99: got that"), "x.toml:4: "),
        (JobError("got that", key="board.networks[2].refs"), "x.toml:8: "),
        (CircuitError("board.stock: the circuit: needs\n9"), "x.toml:2: "),
        (JobError("got a plant", key="loop"), "x.toml: "),
        (RealizationError("no circuit fits: R9"), ""),
        (JobError("got old, expected another", key="--into"), ""),
    ],
)
def test_what_is_said_of_a_key_after_reading_bears_its_line(error, line):
    """Its own line, or that of the nearest table around it; what names no key stays as it is."""
    text = (
        'title = "x"\n[board]\n[board.fixed]\nR99 = 1\n[[board.networks]]\nrefs = ["R1"]\n'
        '[[board.networks]]\nrefs = ["R2"]\n'
    )
    plain = str(error)
    with pytest.raises(type(error)) as caught, telling_lines(text, "x.toml"):
        raise error
    assert str(caught.value) == line + plain
    assert caught.value.exit_code == 2


# Lines of keys


def test_lines_of_keys_agree_with_the_parser():
    """Against tomllib: cutting the text before the line of a key loses the key, and cutting it
    after the line of a one-line key keeps it."""
    text = COEFFICIENTS + REST
    lines = text.split("\n")
    for path, line in lines_of_keys(text).items():
        for count, there in ((line - 1, False), (line, True)):
            value: object = tomllib.loads("\n".join(lines[:count]))
            for part in path:
                value = value.get(part) if isinstance(value, dict) else None
            assert (value is not None) is there


def test_lines_follow_the_file():
    paths = lines_of_keys(COEFFICIENTS + REST)
    assert all(a <= b for a, b in pairwise(paths.values()))
    assert len(paths) == 46


def test_reading_a_job_is_what_loads_the_schema():
    """A fast start: importing the reader loads no schema library."""
    code = (
        "import sys, netlist.jobfile; sys.exit('pydantic' in sys.modules or 'lark' in sys.modules)"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
