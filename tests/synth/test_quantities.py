"""Quantities: what people write is read as they mean it, or refused in one clear line."""

from __future__ import annotations

import math
from decimal import Decimal
from fractions import Fraction

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.errors import QuantityError
from synth.preferred import decade
from synth.quantities import (
    UNITS,
    marking,
    parse,
    parse_exact,
    parse_rails,
    show,
    tolerance_letter,
)

READ = [
    ("4.7 kohm", "ohm", 4700.0),
    ("4.7kohm", "ohm", 4700.0),
    ("4.7 k", "ohm", 4700.0),
    ("4k7", "ohm", 4700.0),
    ("4K7", "ohm", 4700.0),
    ("4k7 ohm", "ohm", 4700.0),
    ("4.7 kΩ", "ohm", 4700.0),
    ("4.7 k\u2126", "ohm", 4700.0),
    ("470R", "ohm", 470.0),
    ("4R7", "ohm", 4.7),
    ("0R47", "ohm", 0.47),
    ("1 Mohm", "ohm", 1e6),
    ("1 mohm", "ohm", 1e-3),
    ("4M7", "ohm", 4.7e6),
    ("4m7", "ohm", 4.7e-3),
    ("1meg", "ohm", 1e6),
    ("2.2 Megohm", "ohm", 2.2e6),
    ("10 nF", "F", 10e-9),
    ("2n2", "F", 2.2e-9),
    ("4µ7", "F", 4.7e-6),
    ("4μ7", "F", 4.7e-6),
    ("1 uF", "F", 1e-6),
    ("p47", "F", 0.47e-12),
    ("2 V", "V", 2.0),
    ("3V3", "V", 3.3),
    ("-3.3 mV", "V", -3.3e-3),
    ("\u22125 V", "V", -5.0),
    ("1 MHz", "Hz", 1e6),
    ("1 meg", "Hz", 1e6),
    ("-3 kHz", "Hz", -3e3),
    ("1e3 Hz", "Hz", 1e3),
    (".5 Hz", "Hz", 0.5),
    ("100 nA", "A", 100e-9),
    ("50 us", "s", 50e-6),
    ("50 µs", "s", 50e-6),
    ("1 %", "%", 0.01),
    ("0.1%", "%", 0.001),
    ("0.5 dB", "dB", 0.5),
    ("3 deg", "deg", 3.0),
    ("3°", "deg", 3.0),
    ("5 V/us", "V/us", 5e6),
    ("5 V/µs", "V/s", 5e6),
    ("2 V/ms", "V/s", 2e3),
    ("1 MV/s", "V/s", 1e6),
    ("8 nV/rtHz", "V/rtHz", 8e-9),
    ("8 nV/√Hz", "V/rtHz", 8e-9),
    ("0.5 pA/sqrt(Hz)", "A/rtHz", 0.5e-12),
    ("100 dB", "ratio", 1e5),
    ("-20 dB", "ratio", 0.1),
    ("200 V/mV", "ratio", 2e5),
    ("40", "ratio", 40.0),
    (4700, "ohm", 4700.0),
    (0.01, "%", 0.01),
    (5e6, "V/us", 5e6),
    (Decimal("0.1"), "Hz", 0.1),
]


@pytest.mark.parametrize(("text", "unit", "value"), READ)
def test_a_quantity_is_the_double_nearest_to_what_is_written(text, unit, value):
    assert parse(text, unit, signed=True) == value


REFUSED = [
    ("4k7k", "ohm", "got '4k7k' with two suffixes, expected a resistance such as"),
    ("4k7 kohm", "ohm", "with two suffixes"),
    ("4.7 kk", "ohm", "got '4.7 kk', expected a resistance"),
    ("4.7 kR", "ohm", "got '4.7 kR', expected a resistance"),
    ("4 k7", "ohm", "got '4 k7', expected a resistance"),
    ("R", "ohm", "got 'R', expected a resistance"),
    ("10 nF", "ohm", "got '10 nF', expected a resistance"),
    ("4k7", "F", "got '4k7', expected a capacitance such as '10 nF' or '2n2'"),
    ("1 F", "V", "got '1 F', expected a voltage"),
    ("1 mhz", "Hz", "got '1 mhz', expected a frequency such as '50 Hz' or '1 MHz'"),
    ("10 q", "V", "got '10 q'"),
    ("-4k7", "ohm", "got '-4k7' with a sign, expected a resistance"),
    ("+4k7", "ohm", "with a sign"),
    ("\u22124k7", "ohm", "with a sign"),
    ("-100 dB", "ratio", "got '-100 dB' with a sign"),
    (-1, "V", "got -1 with a sign, expected a voltage"),
    ("nan", "V", "got 'nan', expected a voltage"),
    ("inf", "Hz", "got 'inf', expected a frequency"),
    ("Infinity", "Hz", "got 'Infinity'"),
    (math.nan, "V", "got nan, expected a voltage"),
    (math.inf, "V", "got inf, expected a voltage"),
    (Decimal("NaN"), "V", "got NaN, expected a voltage"),
    (Decimal("-Infinity"), "V", "got -Infinity, expected a voltage"),
    (Decimal("1e999999999"), "V", r"got 1E\+999999999, expected a voltage"),
    (Decimal("1e-999999999"), "V", "got 1E-999999999, expected a voltage"),
    (10**4000, "V", "got a number of many digits, expected a voltage"),
    ("1e999", "V", "got '1e999', expected a voltage"),
    ("1e99999999", "V", "got '1e99999999', expected a voltage"),
    ("9**9**9", "V", "got '9\\*\\*9\\*\\*9', expected a voltage"),
    ("1,5 V", "V", "got '1,5 V', expected a voltage"),
    ("", "V", "got '', expected a voltage"),
    (" ", "V", "got ' ', expected a voltage"),
    (".", "V", "expected a voltage"),
    ("９ V", "V", "expected a voltage"),
    ("1 V\n.control", "V", r"got '1 V\\n.control', expected a voltage"),
    ("9" * 500, "V", "got '9{57}\\.\\.\\.', expected a voltage"),
    (True, "V", "got true, expected a voltage"),
    ({"a": 1}, "V", "got a table, expected a voltage"),
    ([1, 2], "V", "got a list of 2, expected a voltage"),
    (99, "%", "got 99, expected a percentage such as '1 %' or a plain ratio such as 0.01"),
    ("99", "%", "got '99', expected a percentage"),
]


@pytest.mark.parametrize(("value", "unit", "message"), REFUSED)
def test_what_is_no_such_quantity_is_refused_in_one_line_naming_the_key(value, unit, message):
    with pytest.raises(QuantityError, match=message) as caught:
        parse(value, unit, key="some.key")
    text = str(caught.value)
    assert text.startswith("some.key: got ")
    assert "\n" not in text
    assert len(text) < 200
    assert caught.value.key == "some.key"


def test_an_exact_quantity_is_the_decimal_as_written():
    assert parse_exact("0.1 Hz", "Hz") == Fraction(1, 10)
    assert parse_exact(Decimal("1.1"), "ratio") == Fraction(11, 10)
    assert parse_exact("2n2", "F") == Fraction(22, 10**10)


def test_zero_is_a_quantity_however_its_exponent_reads():
    assert parse_exact(Decimal("0e999999999"), "V") == 0
    assert parse("0 V", "V") == 0


def test_rails_are_read_from_both_ways_of_writing_them():
    assert parse_rails("±12 V") == (-12.0, 12.0)
    assert parse_rails("+/- 2.5 V") == (-2.5, 2.5)
    assert parse_rails(["-5 V", "12 V"]) == (-5.0, 12.0)
    assert parse_rails([-5, 12]) == (-5.0, 12.0)


@pytest.mark.parametrize(
    ("value", "message"),
    [
        ("12 V", "got '12 V', expected two rails such as '±12 V' or"),
        (12, "got 12, expected two rails"),
        (["1 V"], "got a list of 1, expected two rails"),
        ("±-12 V", "got '-12 V' with a sign, expected a voltage"),
        ("±12 A", "got '12 A', expected a voltage"),
        (["-5 V", "x"], "got 'x', expected a voltage"),
    ],
)
def test_rails_that_are_not_two_voltages_are_refused(value, message):
    with pytest.raises(QuantityError, match=f"^board.supply: {message}"):
        parse_rails(value, key="board.supply")


SHOWN = [
    (10200.0, "ohm", "10.2 kohm"),
    (999.94, "Hz", "999.9 Hz"),
    (999.96, "Hz", "1 kHz"),
    (-999.96e-6, "V", "-1 mV"),
    (2.2e-9, "F", "2.2 nF"),
    (0.0, "V", "0 V"),
    (-3.0103, "dB", "-3.01 dB"),
    (45.0, "deg", "45 deg"),
    (0.01, "%", "1 %"),
    (0.98765, "%", "98.77 %"),
    (1e7, "V/us", "10 V/us"),
    (1e7, "V/s", "10 MV/s"),
    (8e-9, "V/rtHz", "8 nV/rtHz"),
    (1e5, "ratio", "100000"),
    (123456.0, "ratio", "123500"),
    (5000.0, "s", "5000 s"),
    (1e20, "Hz", "1e+20 Hz"),
    (math.inf, "ohm", "inf ohm"),
    (math.nan, "dB", "nan dB"),
]


@pytest.mark.parametrize(("value", "unit", "text"), SHOWN)
def test_a_quantity_is_shown_with_the_prefix_an_engineer_would_use(value, unit, text):
    assert show(value, unit) == text


def test_fewer_digits_round_more():
    assert show(1234.5, "Hz", 2) == "1.2 kHz"


@settings(deadline=None, derandomize=True, max_examples=300)
@given(
    mantissa=st.floats(1, 9.999),
    exponent=st.integers(-18, 15),
    sign=st.sampled_from([1, -1]),
    unit=st.sampled_from(UNITS),
    digits=st.integers(2, 15),
)
def test_what_is_shown_reads_back_to_the_digits_shown(mantissa, exponent, sign, unit, digits):
    value = sign * mantissa * 10.0**exponent
    back = parse(show(value, unit, digits), unit, signed=True)
    assert back == pytest.approx(value, rel=0.51 * 10.0 ** (1 - digits), abs=0)


@settings(deadline=None, derandomize=True, max_examples=300)
@given(text=st.text(st.sampled_from("0123456789.eE+-kmMRVnuHz %dB±µ\n"), max_size=9))
def test_any_text_is_a_finite_number_or_one_line(text):
    for unit in UNITS:
        try:
            assert math.isfinite(parse(text, unit, signed=True))
        except QuantityError as error:
            assert "\n" not in str(error)


@pytest.mark.parametrize(
    ("value", "code"),
    [(0.47, "R47"), (4.7, "4R7"), (470, "470R"), (4.7e3, "4K7"), (47.3e3, "47K3"), (4.7e6, "4M7")],
)
def test_resistors_are_marked_as_published(value, code):
    """The list of examples of IEC 60062, as published in encyclopaedias (RKM code).  It starts
    with R47: no zero before the letter.  0R47 is read as well."""
    assert marking(value, "resistor") == code
    assert parse(code, "ohm") == value


@pytest.mark.parametrize(
    ("value", "kind", "code"),
    [
        (4990.0, "resistor", "4K99"),
        (100.0, "resistor", "100R"),
        (1000.0, "resistor", "1K0"),
        (10199.999999999998, "resistor", "10K2"),
        (0.5, "resistor", "R50"),
        (2.2e-9, "capacitor", "2n2"),
        (1e-9, "capacitor", "1n0"),
        (4.7e-6, "capacitor", "4µ7"),
        (100e-12, "capacitor", "100p"),
        (0.47e-12, "capacitor", "p47"),
    ],
)
def test_parts_are_marked_with_the_letter_for_the_point(value, kind, code):
    """Common practice after IEC 60062; the zero of 1K0 and R50 is from memory."""
    assert marking(value, kind) == code


@settings(deadline=None, derandomize=True, max_examples=200)
@given(
    digits=st.sampled_from(decade("E192")),
    exponent=st.integers(-3, 6),
    kind=st.sampled_from(["resistor", "capacitor"]),
)
def test_a_marking_reads_back_as_the_value(digits, exponent, kind):
    scale, unit = ("", "ohm") if kind == "resistor" else ("e-12", "F")
    value = float(Fraction(f"{digits}e{exponent - 2}") * Fraction(f"1{scale}"))
    assert parse(marking(value, kind), unit) == value


@pytest.mark.parametrize("value", [1234.5, 0.0, -1.0, math.inf, math.nan])
def test_a_value_no_code_can_tell_is_not_marked(value):
    with pytest.raises(QuantityError, match=r"expected a resistor value of at most four digits"):
        marking(value, "resistor")


def test_tolerance_letters():
    """IEC 60062, from memory."""
    known = {0.001: "B", 0.0025: "C", 0.005: "D", 0.01: "F", 0.02: "G", 0.05: "J", 0.1: "K"}
    known[0.2] = "M"
    assert {t: tolerance_letter(t) for t in known} == known
    assert tolerance_letter(0.03) == ""
