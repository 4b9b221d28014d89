"""H(s) stated by an expression in s with named parameters.

The text is parsed by the grammar of `notation` and worked out in exact rationals, within bounds
that keep any text from growing; it is never executed.
"""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Collection, Mapping
from fractions import Fraction
from typing import TYPE_CHECKING

from synth.errors import ExpressionError, TargetError
from synth.targets.bounds import checked_number, from_exact_polynomials
from synth.targets.notation import Source
from synth.targets.ratio import LARGEST_SIZE, Ratio, RatioError
from synth.transfer import TransferFunction

if TYPE_CHECKING:
    from lark import Token, Tree

__all__ = ["from_expression"]

MOST_PARAMETERS = 100
MOST_DIGITS = 100
LARGEST_POWER_OF_TEN = 300

_PI = Fraction(math.pi)
_PARAMETER = re.compile(r"[A-Za-z_][A-Za-z0-9_]{0,39}")
_SUPERSCRIPTS = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁺⁻", "0123456789+-")


def from_expression(
    text: str,
    parameters: Mapping[str, Fraction | float | str] | None = None,
    *,
    key: str = "target",
) -> TransferFunction:
    """H(s) from an expression.

    Parameters
    ----------
    text
        The expression; s in rad/s.
    parameters
        Numbers, or expressions without s, which may name other parameters.  One that the
        expression does not use is checked and otherwise ignored: a table of parameters may
        serve several expressions in turn, and a misspelt use shows as an unknown name anyway.
    key
        Path in the job of what holds both, for messages.

    Raises
    ------
    ExpressionError
        What cannot be read or worked out, with the text and the position in it.
    TargetError
        A parameter that is no number, a degree or a root out of reach.

    Examples
    --------
    >>> pi_controller = from_expression("k (1 + s/w)/s", {"k": 40, "w": "2*pi*120"})
    >>> pi_controller.poles_at_origin, round(float(pi_controller.zeros[0].real), 4)
    (1, -753.9822)
    """
    source = Source.read(text, key=f"{key}.expression")
    values = _parameter_values(parameters or {}, f"{key}.parameters")
    ratio = _evaluated(source, {**values, "s": Ratio.variable()})
    if not ratio.numerator:
        raise source.error("H(s) comes out as zero, expected a numerator", 0)
    return from_exact_polynomials(ratio.numerator, ratio.denominator, key=source.key)


def _parameter_values(
    parameters: Mapping[str, Fraction | float | str], key: str
) -> dict[str, Ratio]:
    """The numbers the parameters stand for."""
    if len(parameters) > MOST_PARAMETERS:
        raise TargetError(
            f"got {len(parameters)} parameters, expected at most {MOST_PARAMETERS}", key=key
        )
    values: dict[str, Ratio] = {}
    waiting: dict[str, Source] = {}
    for name, given in parameters.items():
        if not isinstance(name, str) or not _PARAMETER.fullmatch(name):
            raise TargetError(
                f"got the name {name!r:.60}, expected up to 40 letters, digits and '_'", key=key
            )
        if name in ("s", "pi"):
            raise TargetError(f"got a parameter named {name!r}, which has its own meaning", key=key)
        where = f"{key}.{name}"
        if isinstance(given, str):
            waiting[name] = Source.read(given, key=where)
            continue
        number = checked_number(given, key=where, expected="a finite number or an expression")
        if max(number.numerator.bit_length(), number.denominator.bit_length()) > LARGEST_SIZE:
            raise TargetError("got a number out of bounds", key=where)
        values[name] = Ratio.constant(number)
    while waiting:
        ready = [n for n, source in waiting.items() if not waiting.keys() & set(source.names)]
        if not ready:
            raise _circle(waiting)
        for name in ready:
            values[name] = _evaluated(waiting.pop(name), values, parameters.keys() - {name})
    return values


def _circle(waiting: Mapping[str, Source]) -> ExpressionError:
    """The error for parameters each of which needs another of them."""
    path: list[str] = []
    name = next(iter(waiting))
    while name not in path:
        path.append(name)
        name = next(str(t) for t in waiting[name].names if t in waiting)
    path = [*path[path.index(name) :], name]
    source = waiting[path[0]]
    token = next(t for t in source.names if t == path[1])
    shown = " -> ".join(path) if len(path) < 8 else f"{path[0]} -> {path[1]} -> ... -> {path[0]}"
    return source.error(f"parameters refer to each other in a circle ({shown})", token.start_pos)


def _evaluated(source: Source, values: Mapping[str, Ratio], known: Collection[str] = ()) -> Ratio:
    """The value of a text, bottom up and without recursion; `known` are names to suggest
    beside those of `values`."""
    done: dict[int, Ratio] = {}
    for node in source.tree.iter_subtrees():
        operands = [done[id(child)] for child in node.children if id(child) in done]
        try:
            done[id(node)] = _applied(source, node, operands, values, known)
        except RatioError as error:
            raise source.error(str(error), _sign(node).start_pos) from None
    return done[id(source.tree)]


def _applied(
    source: Source,
    node: Tree[Token],
    operands: list[Ratio],
    values: Mapping[str, Ratio],
    known: Collection[str],
) -> Ratio:
    """The value of one node of the tree from the values of its operands."""
    match node.data:
        case "number":
            value = Ratio.constant(_number(source, _sign(node)))
        case "name":
            value = _named(source, _sign(node), values, known)
        case "add":
            value = operands[0] + operands[1]
        case "subtract":
            value = operands[0] - operands[1]
        case "multiply":
            value = operands[0] * operands[1]
        case "adjoin":
            _refuse_run_on_exponent(source, node)
            value = operands[0] * operands[1]
        case "divide":
            _refuse_ambiguous(source, node)
            value = operands[0] / operands[1]
        case "power":
            value = operands[0] ** _exponent(source, node, operands[1])
        case "superscript":
            value = operands[0] ** int(str(_sign(node)).translate(_SUPERSCRIPTS))
        case "negate":
            value = -operands[0]
        case _:  # "affirm" and "group"
            value = operands[0]
    return value


def _sign(node: Tree[Token]) -> Token:
    """The first token within a node that is its own, or within its last operand: where to
    point when the node has no value."""
    from lark import Token

    while True:
        own = [c for c in node.children if isinstance(c, Token)]
        if own:
            return own[0]
        node = node.children[-1]  # type: ignore[assignment]


def _branch(node: Tree[Token], index: int) -> Tree[Token]:
    from lark import Tree

    child = node.children[index]
    if not isinstance(child, Tree):
        raise TypeError(f"child {index} of {node.data} is {child!r}, expected a tree")
    return child


def _number(source: Source, token: Token) -> Fraction:
    mantissa, _, power = token.lower().partition("e")
    if len(mantissa) > MOST_DIGITS:
        raise source.error(f"got a number of more than {MOST_DIGITS} digits", token.start_pos)
    if len(power) > 8 or abs(int(power or 0)) > LARGEST_POWER_OF_TEN:
        raise source.error(
            f"got {token!s:.40}, expected a power of ten from -{LARGEST_POWER_OF_TEN} to "
            f"{LARGEST_POWER_OF_TEN}",
            token.start_pos,
        )
    return Fraction(str(token))


def _named(
    source: Source, token: Token, values: Mapping[str, Ratio], known: Collection[str]
) -> Ratio:
    name = str(token)
    if name in ("pi", "π"):
        return Ratio.constant(_PI)
    if name in values:
        return values[name]
    if name == "s":
        raise source.error("got s, expected a parameter without it", token.start_pos)
    names = sorted({*values, *known, "pi"})
    same = [k for k in names if k.lower() == name.lower()]
    close = [*same, *difflib.get_close_matches(name, names, n=1)]
    hint = f"did you mean {close[0]!r}?" if close else f"expected one of {', '.join(names):.120}"
    raise source.error(f"unknown name {name[:40]!r}, {hint}", token.start_pos)


def _refuse_ambiguous(source: Source, node: Tree[Token]) -> None:
    """Refuse a product without a sign as divisor: 1/2s is (1/2) s to one and 1/(2 s) to another."""
    divisor = _branch(node, 2)
    while divisor.data in ("negate", "affirm"):
        divisor = _branch(divisor, 1)
    if divisor.data != "adjoin":
        return
    while _branch(divisor, 0).data == "adjoin":
        divisor = _branch(divisor, 0)
    raise source.error(
        "a product without a sign behind '/' can be read in two ways, expected '*' or parentheses",
        _branch(divisor, 1).meta.start_pos,
    )


def _refuse_run_on_exponent(source: Source, node: Tree[Token]) -> None:
    """Refuse 2^3s, where 3s may be meant as the exponent; 2^3 s and s^2(s+1) are clear."""
    left = _branch(node, 0)
    last = _branch(left, 1) if left.data == "adjoin" else left
    position = _branch(node, 1).meta.start_pos
    before = source.text[position - 1]
    if (
        last.data == "power"
        and (before.isdigit() or before == ".")
        and source.text[position] != "("
    ):
        raise source.error("got a name right behind an exponent, expected a blank or '*'", position)


def _exponent(source: Source, node: Tree[Token], exponent: Ratio) -> int:
    value = exponent.value
    if value is None or value.denominator != 1:
        came = "s in an exponent" if value is None else "an exponent that is no integer"
        raise source.error(f"got {came}, expected an integer", _branch(node, 2).meta.start_pos)
    return int(value)
