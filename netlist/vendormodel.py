"""A vendor's SPICE model of an op-amp: read, and refused where it would do more than describe one.

A deck is a program, and a model file becomes part of it.  So only statements that describe a
circuit pass: elements of passive parts, semiconductors and sources inside subcircuits, and
``.model``, ``.subckt``, ``.ends``, ``.param``.  Continuation lines are joined before anything is
looked at, comments are dropped, and what is left is plain ASCII.  An element has a name that is
no SPICE statement and as many words as its kind needs; a source is driven by no program, and
nothing is drawn at random: the same model gives the same response.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from pathlib import Path

from netlist.textfile import read_text_file
from synth.errors import JobError
from synth.parts import VendorModel
from synth.quantities import what_came

__all__ = ["PINS", "parse_model", "read_model_text"]

PINS = ("plus", "minus", "vcc", "vee", "out")

LARGEST_MODEL = 500_000
"""Bytes of a model file; real ones have a few thousand."""

LONGEST_CARD = 20_000
"""Characters of one statement."""

_DIRECTIVES = frozenset({".model", ".subckt", ".ends", ".param"})
# Fewest words of an element of each letter: its name, its nodes and what it is.
_ELEMENTS = {
    **dict.fromkeys("rcldebg", 4),
    **dict.fromkeys("fhqjm", 5),
    **dict.fromkeys("vix", 3),
}
# Statements without their dot, which a simulator reads as elements.  DC, IC and IF are left out:
# models have elements of these names.
_STATEMENTS = frozenset(
    {"control", "csparam", "disto", "echo", "else", "elseif", "end", "endc", "endif", "endl"}
    | {"ends", "four", "func", "global", "inc", "include", "lib", "library", "load", "meas"}
    | {"measure", "model", "quit"}
)
_ELEMENT = re.compile(r"[a-z][a-z0-9_.+\-#!:]{0,60}", re.IGNORECASE)
_DRIVEN = re.compile(r"\b(external|tr(?:noise|random)\b)", re.IGNORECASE)
_RANDOM = re.compile(
    r"\b(agauss|gauss|aunif|unif|rnd|rand|random|sgauss|sunif|poisson|exponential)\s*\(",
    re.IGNORECASE,
)
_LIMIT = re.compile(r"\blimit\s*\(", re.IGNORECASE)
_NAME = re.compile(r"[a-z][a-z0-9_]{0,40}", re.IGNORECASE)
_OPENS_FILE = re.compile(r"file\s*=", re.IGNORECASE)
_SUSPECT = re.compile(r"[\"`\\]")
# ngspice ends a line at these comments.
_REMARK = re.compile(r";.*|(?<=\s)\$.*|(?<=\s)//.*")


def read_model_text(file: Path) -> str:
    """The text of a model file.

    Raises
    ------
    JobError
        It cannot be read.
    """
    return read_text_file(file, largest=LARGEST_MODEL, expected="a SPICE model file")


def parse_model(
    text: str, *, name: str, file: str, subcircuit: str, pins: Sequence[str]
) -> VendorModel:
    """The model of a file's text.

    Parameters
    ----------
    name, file
        What to call the file in messages, and what the job calls it.
    subcircuit, pins
        The op-amp in it, and what its nodes are, of `PINS`, in their order.

    Raises
    ------
    JobError
        A statement that is not allowed, with its line; no such subcircuit, or other nodes.
    """
    if not _NAME.fullmatch(subcircuit):
        raise JobError(
            f"got {what_came(subcircuit)}, expected the name of a subcircuit", key="subcircuit"
        )
    if sorted(pins) != sorted(PINS):
        raise JobError(
            f"got {', '.join(what_came(p) for p in pins)}, expected each of {', '.join(PINS)} "
            "once, in the order of the subcircuit's nodes",
            key="pins",
        )
    cards: list[str] = []
    inside = 0
    found: int | None = None
    for number, card in _cards(text, name):
        inside += _checked(card, f"{name}:{number}", inside)
        words = card.split()
        if words[0].lower() == ".subckt" and words[1].lower() == subcircuit.lower():
            found = _nodes(words)
        cards.append(card)
    if inside:
        raise JobError(f"{name}: got a .subckt without its .ends, expected one", key="model")
    if found is None:
        raise JobError(
            f"{name}: got no subcircuit {subcircuit}, expected .subckt {subcircuit} in it",
            key="subcircuit",
        )
    if found != len(pins):
        raise JobError(
            f"{name}: got {found} nodes of the subcircuit {subcircuit}, expected the "
            f"{len(pins)} of {', '.join(pins)}",
            key="pins",
        )
    return VendorModel(
        file=file, subcircuit=subcircuit.lower(), pins=tuple(pins), cards=tuple(cards)
    )


def _cards(text: str, name: str) -> Iterator[tuple[int, str]]:
    """(line, statement), continuation lines joined, comments and blank lines left out."""
    start, joined = 0, ""
    for number, line in enumerate(text.splitlines(), 1):
        if line.lstrip().startswith("*#"):
            raise _refused(f"{name}:{number}", line, "no '*#', which ngspice carries out")
        if line.lstrip().startswith("*"):
            continue
        plain = _REMARK.sub("", f" {line}").strip()
        if not plain:
            continue
        if not all(" " <= c <= "~" or c == "\t" for c in plain):
            raise _refused(f"{name}:{number}", line, "plain ASCII outside comments")
        if plain.startswith("+"):
            if not joined:
                raise _refused(f"{name}:{number}", line, "a statement before its continuation")
            joined += " " + plain[1:].strip()
        else:
            if joined:
                yield start, joined
            start, joined = number, plain
        if len(joined) > LONGEST_CARD:
            raise _refused(f"{name}:{number}", line, f"at most {LONGEST_CARD} characters")
    if joined:
        yield start, joined


def _checked(card: str, place: str, inside: int) -> int:
    """By how much a statement changes the depth of subcircuits; refuses what is not allowed."""
    first, *rest = card.split()
    word = first.lower()
    if _SUSPECT.search(card):
        raise _refused(place, card, "no double quote, backquote or backslash")
    if _OPENS_FILE.search(card):
        raise _refused(place, card, "nothing that opens a file")
    if _RANDOM.search(card) or any(_two_arguments(card[m.end() :]) for m in _LIMIT.finditer(card)):
        raise _refused(place, card, "values that are not drawn at random")
    if word.startswith("."):
        if word not in _DIRECTIVES:
            raise _refused(place, card, f"only {', '.join(sorted(_DIRECTIVES))} and elements")
        if word in {".subckt", ".model"} and not rest:
            raise _refused(place, card, f"a name after {word}")
        if word == ".ends" and not inside:
            raise _refused(place, card, "a .subckt before it")
        return {".subckt": 1, ".ends": -1}.get(word, 0)
    if word[0] not in _ELEMENTS or word in _STATEMENTS or not _ELEMENT.fullmatch(word):
        kinds = " ".join(sorted(_ELEMENTS)).upper()
        raise _refused(place, card, f"only the elements {kinds} by names such as R1")
    if not inside:
        raise _refused(place, card, "elements inside a .subckt alone")
    if len(rest) + 1 < _ELEMENTS[word[0]]:
        raise _refused(
            place, card, f"a name, nodes and a value or model, {_ELEMENTS[word[0]]} words or more"
        )
    if word[0] in "vi" and _DRIVEN.search(" ".join(rest[2:])):
        raise _refused(place, card, "a source of its own, not driven from outside or at random")
    return 0


def _two_arguments(text: str) -> bool:
    """Whether a call, `text` from behind its parenthesis, has two arguments: ``limit`` of two is
    drawn at random, of three it is a clamp."""
    depth, commas = 0, 0
    for character in text:
        if character == ")" and depth == 0:
            break
        depth += {"(": 1, ")": -1}.get(character, 0)
        commas += character == "," and depth == 0
    return commas == 1


def _nodes(words: list[str]) -> int:
    """How many nodes a .subckt line has, its parameters left out."""
    nodes = words[2:]
    for k, word in enumerate(nodes):
        if "=" in word or word.lower().startswith("params:"):
            return k
        if k + 1 < len(nodes) and nodes[k + 1].startswith("="):
            return k
    return len(nodes)


def _refused(place: str, line: str, expected: str) -> JobError:
    shown = " ".join("".join(c if c.isprintable() else " " for c in line).split())[:60]
    return JobError(f"{place}: got {shown!r}, expected {expected}", key="model")
