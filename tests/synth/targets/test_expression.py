"""Targets stated by an expression in s."""

from __future__ import annotations

import math
import time
from fractions import Fraction

import pytest
import sympy
from hypothesis import example, given, settings
from hypothesis import strategies as st

from synth.errors import ExpressionError, TargetError
from synth.targets import Root, from_expression, from_roots

S = sympy.Symbol("s")


def _same(text: str, numerator, denominator, **parameters) -> None:
    target = from_expression(text, parameters)
    lead = Fraction(denominator[0])
    assert target.numerator == tuple(Fraction(c) / lead for c in numerator)
    assert target.denominator == tuple(Fraction(c) / lead for c in denominator)


@pytest.mark.parametrize(
    ("text", "numerator", "denominator"),
    [
        ("-s^2/(s^3+1)", [-1, 0, 0], [1, 0, 0, 1]),
        ("2^3^2/(s+1)", [512], [1, 1]),
        ("2**3**2/(s+1)", [512], [1, 1]),
        ("8/4/2*s/(s+1)", [1, 0], [1, 1]),
        ("1-2-3/(s+1)", [-1, -4], [1, 1]),
        ("2 s/(s+1)", [2, 0], [1, 1]),
        ("2(s+1)/(s+3)^2", [2, 2], [1, 6, 9]),
        ("(s+1)(s+2)/((s+3)(s+4)s)", [1, 3, 2], [1, 7, 12, 0]),
        ("s^2(s+1)/(s+3)^4", [1, 1, 0, 0], [1, 12, 54, 108, 81]),
        ("2^-3 s/(s+1)", [Fraction(1, 8), 0], [1, 1]),
        ("1.25e-2/(.5s+1.)", [Fraction(1, 40)], [1, 2]),
        ("(s+1)^-2", [1], [1, 2, 1]),
        ("3−s·2/(s²+1)", [3, -2, 3], [1, 0, 1]),
        ("6×s⁻² ÷ 3", [2], [1, 0, 0]),
        ("--+-s/(s+1)", [-1, 0], [1, 1]),
        (" 1 /\n\t( s\u00a0+ 1 ) ", [1], [1, 1]),
        ("2*2s/(s+1)", [4, 0], [1, 1]),
        ("0.1/(s+0.3)", [Fraction(1, 10)], [1, Fraction(3, 10)]),
    ],
)
def test_the_notation_is_read_as_in_a_textbook(text, numerator, denominator):
    _same(text, numerator, denominator)


def test_parameters_may_be_numbers_rationals_or_expressions_of_each_other():
    _same("k/(s/w + 1)", [15], [1, 5], k="2 w2 + 5", w2=-1, w="w2 + 2*3")
    _same("k/(s+w)", [Fraction(1, 3)], [1, 0.1], k=Fraction(1, 3), w=0.1)


def test_pi_is_the_same_number_as_in_targets_stated_in_hz():
    target = from_expression("1/((s + 2 pi*120)(s + 2*π*1e3))")
    expected = from_roots([], [Root(120), Root(1000)], 1, "dc")
    assert target.denominator == expected.denominator


def test_common_factors_of_the_author_stay_and_the_arithmetic_adds_none():
    _same("(s+1)/((s+1)(s+2))", [1, 1], [1, 3, 2])
    _same("1/(s+1) + 2/(s+1)", [3], [1, 1])
    _same("1/(s+1) + 1/((s+1)(s+2))", [1, 3], [1, 3, 2])
    # The closed loop of 10/(s(s+1)).
    _same("(10/(s(s+1)))/(1 + 10/(s(s+1)))", [10], [1, 1, 10])


def test_an_unused_parameter_is_checked_and_otherwise_ignored():
    _same("1/(s+1)", [1], [1, 1], spare=5, other="spare/2")
    with pytest.raises(ExpressionError, match=r"^target\.parameters\.spare: division by zero"):
        from_expression("1/(s+1)", {"spare": "1/0"})


# Random trees as text, with the value sympy gives them.
numbers = st.integers(0, 12).map(lambda n: (str(n), sympy.Integer(n)))
decimals = st.integers(1, 99).map(lambda n: (f"{n / 10}", sympy.Rational(n, 10)))
leaves = st.one_of(numbers, decimals, st.just(("s", S)), st.just(("s", S)))


def _grown(parts):
    binary = st.tuples(parts, st.sampled_from("+-*/"), parts)
    return st.one_of(
        binary.map(lambda t: (f"({t[0][0]}){t[1]}({t[2][0]})", _apply(t[0][1], t[1], t[2][1]))),
        st.tuples(parts, parts).map(lambda t: (f"({t[0][0]})({t[1][0]})", t[0][1] * t[1][1])),
        parts.map(lambda t: (f"-({t[0]})", -t[1])),
        st.tuples(parts, st.integers(-3, 3)).map(
            lambda t: (f"({t[0][0]})^{t[1]}", _apply(t[0][1], "^", sympy.Integer(t[1])))
        ),
        # Without parentheses: precedence and association are those of the mathematics.
        st.tuples(leaves, leaves, leaves, leaves).map(
            lambda t: (
                f"{t[0][0]} - {t[1][0]}*{t[2][0]} - {t[3][0]}^2",
                t[0][1] - t[1][1] * t[2][1] - t[3][1] ** 2,
            )
        ),
    )


def _apply(a, sign, b):
    match sign:
        case "+":
            return a + b
        case "-":
            return a - b
        case "*":
            return a * b
        case "/":
            return sympy.zoo if sympy.cancel(b) == 0 else a / b
        case _:
            return sympy.zoo if b <= 0 and sympy.cancel(a) == 0 else a**b


@settings(deadline=None, derandomize=True, max_examples=150)
@given(st.recursive(leaves, _grown, max_leaves=8))
def test_the_value_is_the_one_sympy_computes(tree):
    text, value = tree
    if value.has(sympy.zoo, sympy.nan) or sympy.cancel(value) == 0:
        with pytest.raises(ExpressionError, match=r"division by zero|comes out|power of|degree"):
            from_expression(text)
        return
    try:
        target = from_expression(text)
    except TargetError as error:
        # Bounds are the only excuse, and are tested on their own.
        assert any(w in str(error) for w in ("the degree grows", "lies above", "lies below"))
        return
    n, d = (
        sympy.Poly([sympy.Rational(c.numerator, c.denominator) for c in p], S).as_expr()
        for p in (target.numerator, target.denominator)
    )
    assert sympy.cancel(n / d - value) == 0


@settings(deadline=None, derandomize=True, max_examples=400)
@given(
    st.one_of(
        st.text(max_size=40),
        st.text(alphabet="s0123456789.e+-*/^() pikwz²⁻−·,", max_size=30),
        st.lists(
            st.sampled_from(["s", "(", ")", "2", "^", "**", "/", "-", " ", "k", "pi", "1e9", "²"]),
            max_size=25,
        ).map("".join),
    )
)
@example("(" * 4000)
@example("2^" * 1999 + "2")
@example("-" * 3999 + "s")
@example("s^" * 30 + "s")
@example("((((s+1)^9)^9)^9)^9")
@example("1" * 3000 + "e9/s")
@example("s²⁰⁰⁰⁰⁰⁰⁰⁰⁰⁰")
@example("1/(s+1)" * 400)
@example("\ud800/s")
@example("1/0^-1")
def test_no_text_raises_anything_but_an_error_of_the_target(text):
    try:
        from_expression(text, {"k": "w/3", "w": 2, "z": "pi"})
    except ExpressionError as error:
        assert 0 <= error.position <= len(error.text)
        assert "\n" not in str(error)
    except TargetError as error:
        assert "\n" not in str(error)


@pytest.mark.parametrize(
    ("text", "position", "message"),
    [
        ("2/3s", 3, "a product without a sign behind '/' can be read in two ways, expected '\\*'"),
        ("1/2(s+1)", 3, "can be read in two ways"),
        ("1/-2 s (s+1)", 5, "can be read in two ways"),
        ("(s+1)(s+2)/(s+3)(s+4)", 16, "can be read in two ways"),
        ("2^3s/(s+1)", 3, "got a name right behind an exponent, expected a blank or '\\*'"),
        ("", 0, "it is empty"),
        ("   ", 0, "it is empty"),
        ("1/", 2, "it ends where a number, a name or '\\(' is expected at character 3"),
        ("1+*2", 2, "got '\\*', expected a number, a name or '\\('"),
        ("s 2", 2, "got '2', expected a sign such as '\\*' or '\\+' before it"),
        ("1/(s+1.2.3)", 8, "got '.3', expected a sign"),
        ("1/(s+1", 2, "'\\(' is never closed"),
        ("1/s+1)", 5, "got '\\)' without its '\\('"),
        ("2,5/s", 1, "got ',', expected an expression in s; decimals are written with '.'"),
        ("H = 1/s", 2, "got '=', expected an expression in s; write only what H\\(s\\) equals"),
        ("1/[s+1]", 2, "got '\\[', .*parentheses are round"),
        ("1 + é", 4, "got 'é', expected an expression in s"),
        ("1\x1b/s", 1, "got '\\\\x1b', expected an expression in s"),
        ("1/(S+1)", 3, "unknown name 'S', did you mean 's'\\?"),
        ("1/(s + w_z)", 7, "unknown name 'w_z', did you mean 'wz'\\?"),
        ("exp(-s)", 0, "unknown name 'exp', expected one of pi, s, wz"),
        ("1 + 1/(s-s)", 5, "division by zero"),
        ("0^-1", 1, "division by zero"),
        ("0^0", 1, "zero to the power of zero"),
        ("s^s", 2, "got s in an exponent, expected an integer"),
        ("s^(1/2)", 2, "got an exponent that is no integer, expected an integer"),
        ("9^9^9", 1, "got an exponent beyond 1000"),
        ("1/(s+1)^25", 7, "the degree grows to 25, expected at most 24"),
        ("1/((s+1)^20*(s+2)^20)", 11, "the degree grows to 40, expected at most 24"),
        ("7^700*7^700*7^700", 11, "the numbers grow out of bounds"),
        ("1 + 1e999999", 4, "got 1e999999, expected a power of ten from -300 to 300"),
        ("1/(s+" + "9" * 101 + ")", 5, "got a number of more than 100 digits"),
        ("1/(s+1) - 1/(s+1)", 0, "H\\(s\\) comes out as zero, expected a numerator"),
        ("(" * 51 + "s" + ")" * 51, 50, "parentheses nest deeper than 50 levels"),
    ],
)
def test_every_error_points_at_its_character(text, position, message):
    with pytest.raises(ExpressionError, match=message) as caught:
        from_expression(text, {"wz": 3})
    assert caught.value.position == position
    assert str(caught.value).startswith("target.expression: ")
    assert str(caught.value).endswith(f"at character {position + 1}")
    shown, caret = caught.value.marked.splitlines()
    assert caret == " " * caret.index("^") + "^"
    if text.isprintable():
        assert shown[caret.index("^") :][:1] == text[position : position + 1]


def test_positions_count_characters_of_a_text_of_several_lines():
    with pytest.raises(ExpressionError, match="unknown name 'q'") as caught:
        from_expression("1/(s\n  + q)")
    assert caught.value.text[caught.value.position] == "q"
    assert len(caught.value.marked.splitlines()) == 2


@pytest.mark.parametrize(
    ("parameters", "message"),
    [
        ({"a": "b+1", "b": "2 a"}, r"parameters\.a: .* in a circle \(a -> b -> a\) at character 1"),
        ({"b": "a", "a": "1+a"}, r"parameters\.a: .* in a circle \(a -> a\) at character 3"),
        ({"a": "2*s"}, r"parameters\.a: got s, expected a parameter without it at character 3"),
        ({"a": "2*bb", "bob": "1"}, r"parameters\.a: unknown name 'bb', did you mean 'bob'\?"),
        ({"a": "1+"}, r"parameters\.a: it ends where a number"),
        ({"a": math.nan}, r"parameters\.a: got nan, expected a finite number or an expression"),
        ({"a": -math.inf}, r"parameters\.a: got -inf, expected a finite number"),
        ({"a": True}, r"parameters\.a: got True, expected a finite number"),
        ({"a": [1]}, r"parameters\.a: got \[1\], expected a finite number"),
        ({"a": Fraction(1, 3**3000)}, r"parameters\.a: got a number out of bounds"),
        ({"s": 1}, r"parameters: got a parameter named 's', which has its own meaning"),
        ({"pi": 3}, r"parameters: got a parameter named 'pi', which has its own meaning"),
        ({"2x": 1}, r"parameters: got the name '2x', expected up to 40 letters, digits and '_'"),
        ({"a b": 1}, r"parameters: got the name 'a b', expected up to 40 letters"),
        ({f"p{k}": k for k in range(101)}, r"got 101 parameters, expected at most 100"),
    ],
)
def test_a_parameter_that_is_no_number_is_refused(parameters, message):
    with pytest.raises(TargetError, match=message) as caught:
        from_expression("a/(s+1)", parameters)
    assert "\n" not in str(caught.value)


def test_a_long_chain_of_parameters_is_followed():
    chain = {f"p{k}": f"p{k + 1} + 1" for k in range(99)} | {"p99": 1}
    _same("p0/(s+1)", [100], [1, 1], **chain)


@pytest.mark.parametrize("text", [5, None, b"s", ["s"]])
def test_what_is_no_text_is_refused(text):
    with pytest.raises(TargetError, match=r"target\.expression: got .*, expected an expression as"):
        from_expression(text)


def test_a_text_of_ten_megabytes_is_refused_at_once_and_not_kept():
    start = time.process_time()
    with pytest.raises(ExpressionError, match="got 10000000 characters, expected at most 4000"):
        from_expression("s" * 10_000_000)
    assert time.process_time() - start < 1


def test_a_huge_value_behind_few_characters_is_refused():
    with pytest.raises(TargetError, match=r"a root of H\(s\) lies above 1e\+12 Hz"):
        from_expression("1/(1e-300 s + 1)")
