"""A pack read back: ``design.json`` to what it takes to make the design again.

The file is judged before anything is computed from it: a pack that is damaged, incomplete or of
another format is refused in one line that names the file and the key.
"""

from __future__ import annotations

import json
import re
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn

from netlist.jobfile import parse_job
from netlist.records import FORMAT
from synth.constants import LARGEST_SEED, MOST_BOARDS
from synth.errors import JobError
from synth.job import Job, JobText
from synth.preferred import SERIES
from synth.quantities import what_came
from synth.shortages import Shortage

if TYPE_CHECKING:
    from synth.recorded import Earlier

__all__ = ["LARGEST_RECORD", "read_pack"]

LARGEST_RECORD = 50_000_000
"""Bytes of a ``design.json``; that of a board of order 12 has 50 thousand."""

AGAIN = "make the pack again with polewright design"

KINDS = ("resistor", "capacitor")

_REFERENCE = re.compile(r"[A-Z][A-Z0-9_]{0,15}")
_BARE = re.compile(r"[A-Za-z0-9_-]+(\.[A-Za-z0-9_-]+)*")


def read_pack(folder: str | Path) -> Earlier:
    """The design a pack holds.

    Raises
    ------
    JobError
        No pack, one of another format, a damaged one, or one whose job cannot be read.
    """
    from synth.forms import FORMS
    from synth.recorded import Earlier, RecordedPart

    name = Path(folder) / "design.json"
    record = _record(Path(folder), name)
    top = _Table(record, "", str(name))
    # A version that is a number at all: true is none, though equal to 1.
    if top.given("format") != FORMAT or isinstance(top.given("format"), bool):
        top.unfit("format", f"expected {FORMAT}")
    if "job" not in record:
        top.refuse("job", f"is missing: an earlier version wrote this pack; {AGAIN}")
    job = _job(top.table("job"))
    form = top.one_of("form", tuple(FORMS))
    parts: dict[str, RecordedPart] = {}
    for part in top.tables("components"):
        kind = part.one_of("kind", (*KINDS, "op_amp"))
        if kind == "op_amp":
            continue
        ref = part.text("ref")
        if ref in parts:
            part.unfit("ref", f"expected a reference of its own, as {parts[ref].place} has this")
        parts[ref] = RecordedPart(
            ref=ref,
            kind=kind,
            nets=part.two_texts("nets"),
            value=part.positive("value"),
            place=part.path,
        )
    drawn = top.table("yield")
    boards = drawn.count("boards", least=1, most=MOST_BOARDS)
    return Earlier(
        job=job,
        form=form,
        parts=tuple(parts.values()),
        boards=boards,
        seed=drawn.count("seed", least=0, most=LARGEST_SEED),
        shortages=_shortages(top) if "repick" in record else (),
        name=str(name),
        passed=drawn.count("passed", least=0, most=boards),
    )


def _job(source: _Table) -> Job:
    """The job in its text and the files that come with it."""
    name = source.line("name")
    files = source.table("files")
    texts = {each: files.text(each) for each in files.content}
    text = source.text("text")
    job = parse_job(text, name=f"{source.file}: {source.path}.text: {name}", files=texts)
    return replace(job, source=JobText(name=name, text=text, files=tuple(texts.items())))


def _shortages(top: _Table) -> tuple[Shortage, ...]:
    """What an earlier design already had to do without."""
    told = top.table("repick")
    if not told.tables("without"):
        told.unfit("without", "expected at least one value")
    return tuple(
        Shortage(
            kind=each.one_of("kind", KINDS),
            value=each.positive("value"),
            ref=each.reference("ref"),
            source=each.one_of("source", ("", *SERIES, "stock")),
        )
        for each in (*told.tables("already_without"), *told.tables("without"))
    )


def _record(folder: Path, name: Path) -> dict[str, object]:
    """The content of the file, a JSON object."""
    try:
        if not folder.is_dir():
            what = "is a file" if folder.exists() else "does not exist"
            raise JobError(f"{folder}: {what}, expected the folder of a pack")
        with name.open("rb") as stream:
            data = stream.read(LARGEST_RECORD + 1)
        if len(data) > LARGEST_RECORD:
            raise JobError(f"{name}: got more than {LARGEST_RECORD} bytes, expected a pack's")
        record = json.loads(data.decode("utf-8"), parse_constant=_no_number)
    except FileNotFoundError:
        raise JobError(f"{folder}: holds no design.json, expected the folder of a pack") from None
    except OSError as error:
        reason = (error.strerror or type(error).__name__).lower()
        raise JobError(f"{what_came(str(name))}: cannot be read: {reason}") from None
    except json.JSONDecodeError as error:
        raise JobError(
            f"{name}:{error.lineno}: got no JSON at column {error.colno}; the file is damaged, "
            f"{AGAIN}"
        ) from None
    except (UnicodeDecodeError, RecursionError, ValueError) as error:
        if isinstance(error, JobError):
            raise
        raise JobError(f"{name}: got no JSON; the file is damaged, {AGAIN}") from None
    if not isinstance(record, dict):
        raise JobError(f"{name}: got {what_came(record)}, expected the record of a design")
    return record


def _no_number(text: str) -> NoReturn:
    raise ValueError(text)


@dataclass(frozen=True)
class _Table:
    """An object of the record: its keys are read, each checked."""

    content: dict[str, object]
    path: str
    file: str

    def _below(self, key: str) -> str:
        shown = key if _BARE.fullmatch(key) else what_came(key)
        return f"{self.path}.{shown}" if self.path else shown

    def refuse(self, key: str, problem: str) -> NoReturn:
        self._refuse_at(self._below(key), problem)

    def unfit(self, key: str, expected: str) -> NoReturn:
        """Refuse the value of `key`: what came, and what was expected."""
        self._unfit_at(self._below(key), self.content[key], expected)

    def _unfit_at(self, path: str, value: object, expected: str) -> NoReturn:
        self._refuse_at(path, f"got {'nothing' if value is None else what_came(value)}, {expected}")

    def _refuse_at(self, path: str, problem: str) -> NoReturn:
        error = JobError(f"{self.file}: {path}: {problem}")
        error.key = path
        raise error

    def given(self, key: str) -> object:
        if key not in self.content:
            self.refuse(key, f"is missing; the file is damaged, {AGAIN}")
        return self.content[key]

    def text(self, key: str) -> str:
        value = self.given(key)
        if not isinstance(value, str):
            self.unfit(key, "expected a text")
        return value

    def line(self, key: str) -> str:
        """A text on one line."""
        value = self.text(key)
        if not value or not value.isprintable():
            self.unfit(key, "expected one line of text without control characters")
        return value

    def reference(self, key: str) -> str:
        """The reference of a part, or an empty text."""
        value = self.text(key)
        if value and not _REFERENCE.fullmatch(value):
            self.unfit(key, "expected the reference of a part, or ''")
        return value

    def one_of(self, key: str, known: tuple[str, ...]) -> str:
        """A text that is one of those known."""
        value = self.text(key)
        if value not in known:
            listed = ", ".join(each or "''" for each in known)
            self.unfit(key, f"expected one of {listed}")
        return value

    def two_texts(self, key: str) -> tuple[str, str]:
        value = self.given(key)
        if not isinstance(value, list) or len(value) != 2:
            self.unfit(key, "expected two nets")
        for place, net in enumerate(value):
            if not isinstance(net, str):
                self._unfit_at(f"{self._below(key)}[{place}]", net, "expected the name of a net")
        return value[0], value[1]

    def positive(self, key: str) -> float:
        value = self.given(key)
        if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0 < value < 1e300:
            self.unfit(key, "expected a positive number")
        return float(value)

    def count(self, key: str, *, least: int, most: int) -> int:
        value = self.given(key)
        if isinstance(value, bool) or not isinstance(value, int) or not least <= value <= most:
            self.unfit(key, f"expected a whole number from {least} to {most}")
        return value

    def table(self, key: str) -> _Table:
        value = self.given(key)
        if not isinstance(value, dict):
            self.unfit(key, "expected a table")
        return _Table(value, self._below(key), self.file)

    def tables(self, key: str) -> list[_Table]:
        value = self.given(key)
        if not isinstance(value, list):
            self.unfit(key, "expected a list of tables")
        found: list[_Table] = []
        for place, each in enumerate(value):
            path = f"{self._below(key)}[{place}]"
            if not isinstance(each, dict):
                self._unfit_at(path, each, "expected a table")
            found.append(_Table(each, path, self.file))
        return found
