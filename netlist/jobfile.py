"""Job files: TOML text in, a checked `synth.job.Job` out, or one clear error.

Every mistake that can be found is reported at once, one per line, each as
``file:line: key.path: what came, what was expected``.  Numbers are read as decimals, so that
coefficients reach `synth` exactly as they are written.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping
from dataclasses import replace
from decimal import Decimal
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

from netlist.jobpopulation import purchase_keys, read_population
from netlist.jobvalues import read_fixed, unknown_key
from netlist.mistakes import Mistakes
from netlist.namedfiles import NamedFiles
from netlist.textfile import read_text_file
from synth.errors import JobError
from synth.job import Accept, Board, Job, JobText, Loop, Signal
from synth.op_amps import DEFAULT_CLASS, op_amp_class
from synth.parts import OpAmp, PartRule, StockItem, VendorModel
from synth.quantities import what_came

if TYPE_CHECKING:
    from pydantic_core import ErrorDetails

    from netlist.jobschema import BoardTable, JobTable, LoopTable, TargetTable
    from synth.transfer import TransferFunction

__all__ = ["DEFAULT_CAPACITORS", "DEFAULT_RESISTORS", "parse_job", "read_job"]

LARGEST_FILE = 1_000_000  # bytes

DEFAULT_RESISTORS = PartRule(
    kind="resistor", series="E96", tolerance=0.01, smallest=1e3, largest=1e6
)
DEFAULT_CAPACITORS = PartRule(
    kind="capacitor", series="E12", tolerance=0.05, smallest=100e-12, largest=1e-6
)

_PLACE = re.compile(r"(.*) \(at (?:line (\d+), column (\d+)|end of document)\)", re.DOTALL)


def read_job(path: str | Path) -> Job:
    """The job a file states.

    Raises
    ------
    JobError
        The file cannot be read, or what `parse_job` refuses.
    """
    file = Path(path)
    text = read_text_file(file, largest=LARGEST_FILE, expected="a job file", kind=" in TOML")
    return parse_job(text, name=str(file), folder=file.parent)


def parse_job(
    text: str,
    *,
    name: str = "job",
    folder: str | Path | None = None,
    files: Mapping[str, str] | None = None,
) -> Job:
    """The job a TOML text states; `name` stands for the file in messages.

    Parameters
    ----------
    folder
        Where the files the job names lie; without one, a job that names a file is refused.
    files
        In place of a folder: the text of each file, by its name as the job states it.

    Raises
    ------
    JobError
        Anything wrong with the text.  The message has one line per mistake; ``key`` is the
        path of the first.
    """
    mistakes = Mistakes(text, name)
    document = _parsed(text, name)
    if not document:
        raise JobError(
            f"{name}: got a job without a key, expected at least a table [target] that states H(s) "
            "and a table [signal] with band = ['1 Hz', '20 kHz']"
        )
    table = _checked(document, mistakes)
    if table is None:
        mistakes.stop()
    signal = mistakes.attempt("signal", lambda: Signal(**table.signal.given()))
    named = NamedFiles(folder=None if folder is None else Path(folder), texts=files)
    board = _board(table.board, mistakes, named)
    accept = mistakes.attempt("accept", lambda: Accept(**table.accept.given()))
    loop = None
    if (plant := table.loop) is not None:
        loop = mistakes.attempt("loop", lambda: _loop(plant))
    target = mistakes.attempt("target", lambda: _target(table.target, signal))
    if mistakes.found or signal is None or board is None or accept is None or target is None:
        mistakes.stop()
    transfer, notices = target
    titled = {"title": table.title} if table.title else {}
    return Job(
        target=transfer,
        signal=signal,
        board=board,
        accept=accept,
        loop=loop,
        notices=notices,
        source=JobText(name=Path(name).name, text=text, files=named.taken),
        **titled,
    )


def _parsed(text: str, name: str) -> dict[str, Any]:
    """The TOML document, decimals exact."""
    if len(text) > LARGEST_FILE:
        raise JobError(f"{name}: got more than {LARGEST_FILE} characters, expected a job file")
    try:
        return tomllib.loads(text, parse_float=Decimal)
    except tomllib.TOMLDecodeError as error:
        problem, line, column = str(error), None, None
        if found := _PLACE.fullmatch(problem):
            problem, line, column = found.groups()
        place = f"{name}:{line}" if line else name
        where = f" at column {column}" if column else " at the end"
        problem = " ".join(problem.split())
        raise JobError(
            f"{place}: {problem[:1].lower()}{problem[1:]}{where}, expected TOML"
        ) from None
    except (ValueError, ArithmeticError):
        raise JobError(f"{name}: got a number too long to read, expected TOML") from None
    except RecursionError:
        raise JobError(f"{name}: got brackets nested too deeply, expected TOML") from None


def _checked(document: Mapping[str, Any], mistakes: Mistakes) -> JobTable | None:
    """The document with every key known and every value read; None with mistakes noted."""
    from pydantic import ValidationError

    from netlist.jobschema import JobTable, keys_of

    try:
        return JobTable.model_validate(document)
    except ValidationError as invalid:
        keys = dict(keys_of(JobTable))
        for error in invalid.errors(include_url=False):
            path = _path(error["loc"])
            mistakes.add(path, _problem(path, error, keys))
        return None


def _path(places: tuple[int | str, ...]) -> tuple[str, ...]:
    """The key path of a finding; a table of an array bears its number, counted from 1."""
    path: list[str] = []
    for place in places:
        if isinstance(place, int):
            path[-1] += f"[{place + 1}]"
        else:
            path.append(place)
    return tuple(path)


def _problem(
    path: tuple[str, ...], error: ErrorDetails, keys: Mapping[tuple[str, ...], str]
) -> str:
    """What to say of one finding of the schema."""
    path = tuple(part.partition("[")[0] for part in path)
    if error["type"] == "missing":
        return f"is missing, expected {keys[path]}"
    if error["type"] == "extra_forbidden":
        siblings = [key[-1] for key in keys if key[:-1] == path[:-1]]
        return unknown_key(path[-1], siblings, elsewhere=[".".join(key) for key in keys])
    if isinstance(known := error.get("ctx", {}).get("error"), JobError):
        return known.problem
    name = f"[[{'.'.join(path)}]]" if path == ("board", "networks") else f"[{'.'.join(path)}]"
    return f"got {what_came(error['input'])}, expected a table {name}"


def _board(table: BoardTable, mistakes: Mistakes, files: NamedFiles) -> Board | None:
    """The board with the defaults of everything not stated."""
    stock = mistakes.attempt("board.stock", lambda: _stock(table.stock, files))
    held: Mapping[str, tuple[StockItem, ...]] = stock or {}
    resistors = mistakes.attempt(
        "board.resistors",
        lambda: _rule(DEFAULT_RESISTORS, purchase_keys(table.resistors), held),
    )
    capacitors = mistakes.attempt(
        "board.capacitors",
        lambda: _rule(DEFAULT_CAPACITORS, purchase_keys(table.capacitors), held),
    )
    fixed = [
        mistakes.attempt(f"board.fixed.{ref}", partial(read_fixed, ref, value))
        for ref, value in table.fixed.items()
    ]
    figures = purchase_keys(table.op_amp)
    stated = {key: figures.pop(key, None) for key in ("model", "subcircuit", "pins")}
    op_amp = mistakes.attempt("board.op_amp", lambda: _op_amp(figures))
    model = mistakes.attempt("board.op_amp", lambda: _vendor_model(stated, files))
    population = read_population(table, mistakes)
    plain = ("supply", "form", "inverted", "share_values", "pairs")
    rest = {k: v for k, v in table.given().items() if k in plain}
    if "form" in rest:
        from synth.forms import check_form_name

        mistakes.attempt("board.form", lambda: check_form_name(rest["form"]))
    if resistors is None or capacitors is None or op_amp is None or stock is None:
        return None
    if population is None:
        return None
    return mistakes.attempt(
        "board",
        lambda: Board(
            op_amp=op_amp,
            resistors=resistors,
            capacitors=capacitors,
            fixed=tuple(pair for pair in fixed if pair),
            population=population,
            vendor_model=model,
            **rest,
        ),
    )


def _stock(stated: str | None, files: NamedFiles) -> dict[str, tuple[StockItem, ...]]:
    """What the drawer holds, by kind; nothing without one."""
    if stated is None:
        return {}
    from netlist.stockfile import parse_stock, read_stock_text

    text, name = files.take(stated, read_stock_text)
    return parse_stock(text, name=name)


def _rule(
    default: PartRule, given: dict[str, Any], stock: Mapping[str, tuple[StockItem, ...]]
) -> PartRule:
    """A rule as stated; a stock of its kind stands in for the series."""
    return replace(default, stock=stock.get(default.kind, ()), **given)


def _op_amp(given: dict[str, Any]) -> OpAmp:
    """A class with the figures that were stated in place of its own."""
    kind = given.pop("kind", DEFAULT_CLASS)
    return replace(op_amp_class(kind, key="kind"), **given)


def _vendor_model(stated: Mapping[str, Any], files: NamedFiles) -> VendorModel | None:
    """The model the job names, read and checked; None without one."""
    if all(value is None for value in stated.values()):
        return None
    missing = [key for key, value in stated.items() if value is None]
    if missing:
        raise JobError(
            f"{' and '.join(missing)} missing, expected model, subcircuit and pins together",
            key=missing[0],
        )
    from netlist.vendormodel import parse_model, read_model_text

    try:
        text, name = files.take(stated["model"], read_model_text)
    except JobError as error:
        error.key = error.key or "model"
        raise
    return parse_model(
        text,
        name=name,
        file=stated["model"],
        subcircuit=stated["subcircuit"],
        pins=stated["pins"],
    )


def _loop(table: LoopTable) -> Loop:
    from synth.targets import from_coefficients

    given = table.given()
    plant = from_coefficients(given.pop("numerator"), given.pop("denominator"), key="loop")
    return Loop(plant=plant, **given)


def _target(
    table: TargetTable, signal: Signal | None
) -> tuple[TransferFunction, tuple[str, ...]] | None:
    """H(s), reduced and accepted, with its notices; None without a signal to judge it by."""
    from synth import targets

    match table.way:
        case "coefficients":
            stated = targets.from_coefficients(table.numerator, table.denominator)
        case "roots":
            zeros = [targets.Root(f, q) for f, q in table.zeros]
            poles = [targets.Root(f, q) for f, q in table.poles]
            stated = targets.from_roots(zeros, poles, table.gain, table.gain_at)
        case _:
            stated = targets.from_expression(table.expression, table.parameters)
    if signal is None:
        return None
    return targets.accept(stated, allow_unstable=table.allow_unstable, band_hz=signal.band_hz)
