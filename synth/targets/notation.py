"""The notation of expressions in s: from text to a tree, or to an error at a character.

The notation is that of a textbook: numbers, names, ``+ - * /``, ``^`` or ``**``, parentheses,
and a product without a sign where it can be read in one way only: ``2 s``, ``3(s+1)``,
``(s+1)(s+2)``, but not behind a ``/``.  A power binds first and to the right, so ``-s^2`` is
``-(s^2)``.  The multiplication dot and cross, the true minus sign, superscripts and the Greek pi
are read as what they are.  Nothing is ever executed.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache, cached_property
from typing import TYPE_CHECKING

from synth.errors import ExpressionError, TargetError

if TYPE_CHECKING:
    from lark import Lark, Token, Tree

__all__ = ["DEEPEST_NESTING", "LONGEST_TEXT", "Source"]

LONGEST_TEXT = 4000
DEEPEST_NESTING = 50

GRAMMAR = r"""
?start: sum
?sum: product
    | sum PLUS product -> add
    | sum MINUS product -> subtract
?product: signed
    | product TIMES signed -> multiply
    | product OVER signed -> divide
?signed: chain
    | MINUS signed -> negate
    | PLUS signed -> affirm
?chain: power
    | chain follower -> adjoin
?power: atom
    | atom RAISED exponent -> power
    | atom SUPERSCRIPT -> superscript
?exponent: power
    | MINUS exponent -> negate
    | PLUS exponent -> affirm
?follower: bounded
    | bounded RAISED exponent -> power
    | bounded SUPERSCRIPT -> superscript
?atom: NUMBER -> number
    | bounded
?bounded: NAME -> name
    | LEFT sum RIGHT -> group

NUMBER: /([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?/
NAME: /[A-Za-z_][A-Za-z0-9_]*|π/
SUPERSCRIPT: /[⁺⁻]?[⁰¹²³⁴⁵⁶⁷⁸⁹]+/
RAISED: "^" | "**"
TIMES: "*"
OVER: "/"
PLUS: "+"
MINUS: "-"
LEFT: "("
RIGHT: ")"
%ignore " "
"""

# One character for one, so that positions stay those of the text.
_SAME_SIGN = str.maketrans(
    {"−": "-", "–": "-", "·": "*", "⋅": "*", "∙": "*", "×": "*", "∕": "/", "÷": "/"}
)
_HINTS = {
    ",": "; decimals are written with '.'",
    "=": "; write only what H(s) equals",
    "[": "; parentheses are round",
    "{": "; parentheses are round",
}


@dataclass(frozen=True)
class Source:
    """A text that has been parsed.

    Attributes
    ----------
    text
        As shown in errors: line breaks are blanks.
    tree
        Its nodes are named as in the grammar; signs stay in it as tokens.
    key
        Path in the job of what holds the text, for messages.
    """

    text: str
    tree: Tree[Token]
    key: str

    @classmethod
    def read(cls, text: str, *, key: str) -> Source:
        """Parse a text.

        Raises
        ------
        ExpressionError
            It cannot be read.
        """
        if not isinstance(text, str):
            raise TargetError(f"got {text!r:.60}, expected an expression as text", key=key)
        # Positions must stay, so what cannot be shown becomes a blank in its place.
        shown = "".join(c if c.isprintable() else " " for c in text[: LONGEST_TEXT + 1])
        if len(text) > LONGEST_TEXT:
            problem = f"got {len(text)} characters, expected at most {LONGEST_TEXT}; it is too long"
            raise ExpressionError(problem, text=shown, position=LONGEST_TEXT, key=key)
        plain = "".join(" " if c.isspace() else c for c in text).translate(_SAME_SIGN)
        problem, position = _unmatched_parenthesis(plain)
        if problem:
            raise ExpressionError(problem, text=shown, position=position, key=key)
        return cls(shown, _parsed(plain, shown, key), key)

    def error(self, problem: str, position: int | None) -> ExpressionError:
        """An error at a character of this text, counted from 0."""
        return ExpressionError(problem, text=self.text, position=position or 0, key=self.key)

    @cached_property
    def names(self) -> tuple[Token, ...]:
        """Every name in the text."""
        from lark import Token

        return tuple(
            child
            for node in self.tree.find_data("name")
            for child in node.children
            if isinstance(child, Token)
        )


def _unmatched_parenthesis(plain: str) -> tuple[str, int]:
    """What is wrong with the parentheses, ``""`` for nothing, and where."""
    opened: list[int] = []
    for position, character in enumerate(plain):
        if character == "(":
            opened.append(position)
        elif character == ")":
            if not opened:
                return "got ')' without its '('", position
            opened.pop()
        if len(opened) > DEEPEST_NESTING:
            return f"parentheses nest deeper than {DEEPEST_NESTING} levels", position
    return ("'(' is never closed", opened[-1]) if opened else ("", 0)


@cache
def _parser() -> Lark:
    from lark import Lark

    return Lark(GRAMMAR, parser="lalr", propagate_positions=True, maybe_placeholders=False)


def _parsed(plain: str, shown: str, key: str) -> Tree[Token]:
    from lark.exceptions import UnexpectedCharacters, UnexpectedToken

    operand = "a number, a name or '('"
    try:
        return _parser().parse(plain)
    except UnexpectedCharacters as error:
        position = error.pos_in_stream or 0
        sign = shown[position] if shown[position] != " " else plain[position]
        problem = f"got {sign!r}, expected an expression in s{_HINTS.get(sign, '')}"
    except UnexpectedToken as error:
        if error.token.type == "$END":
            position = len(plain.rstrip())
            problem = f"it ends where {operand} is expected" if position else "it is empty"
        else:
            position = error.token.start_pos or 0
            came = shown[position : position + len(error.token)]
            wants_operand = "NUMBER" in error.accepts
            expected = operand if wants_operand else "a sign such as '*' or '+' before it"
            problem = f"got '{came:.40}', expected {expected}"
    raise ExpressionError(problem, text=shown, position=position, key=key)
