"""A pack read back: ``design.json`` to what it takes to make the design again.

The file is judged before anything is computed from it: a pack that is damaged, incomplete or of
another format is refused in one line that names the file and the key.
"""

from __future__ import annotations

import json
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn

from netlist.jobfile import parse_job
from netlist.records import FORMAT
from synth.errors import JobError
from synth.job import JobText
from synth.quantities import what_came
from synth.shortages import Shortage

if TYPE_CHECKING:
    from synth.recorded import Earlier

__all__ = ["LARGEST_RECORD", "read_pack"]

LARGEST_RECORD = 50_000_000
"""Bytes of a ``design.json``; that of a board of order 12 has 50 thousand."""

AGAIN = "make the pack again with polewright design"


def read_pack(folder: str | Path) -> Earlier:
    """The design a pack holds.

    Raises
    ------
    JobError
        No pack, one of another format, a damaged one, or one whose job cannot be read.
    """
    from synth.forms import check_form_name
    from synth.recorded import Earlier, RecordedPart

    name = Path(folder) / "design.json"
    record = _record(Path(folder), name)
    top = _Table(record, "", str(name))
    if top.given("format") != FORMAT:
        top.refuse("format", f"got {what_came(top.given('format'))}, expected {FORMAT}")
    if "job" not in record:
        top.refuse("job", f"is missing: an earlier version wrote this pack; {AGAIN}")
    source = top.table("job")
    files = source.table("files")
    texts = {each: files.text(each) for each in files.content}
    title = f"{name}: {source.text('name')}"
    job = parse_job(source.text("text"), name=title, files=texts)
    try:
        check_form_name(top.text("form"))
    except JobError as error:
        top.refuse("form", error.problem)
    parts = [
        RecordedPart(
            ref=part.text("ref"),
            kind=part.text("kind"),
            nets=part.two_texts("nets"),
            value=part.positive("value"),
        )
        for part in top.tables("components")
        if part.text("kind") != "op_amp"
    ]
    drawn = top.table("yield")
    return Earlier(
        job=replace(
            job,
            source=JobText(
                name=source.text("name"), text=source.text("text"), files=tuple(texts.items())
            ),
        ),
        form=top.text("form"),
        parts=tuple(parts),
        boards=drawn.count("boards", least=1),
        seed=drawn.count("seed", least=0),
        shortages=_shortages(top) if "repick" in record else (),
    )


def _shortages(top: _Table) -> tuple[Shortage, ...]:
    """What an earlier design already had to do without."""
    found = []
    told = top.table("repick")
    for each in (*told.tables("already_without"), *told.tables("without")):
        if each.text("kind") not in ("resistor", "capacitor"):
            each.refuse("kind", f"got {what_came(each.text('kind'))}, expected a kind of part")
        found.append(
            Shortage(
                kind=each.text("kind"),
                value=each.positive("value"),
                ref=each.text("ref"),
                source=each.text("source"),
            )
        )
    return tuple(found)


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
        return f"{self.path}.{key}" if self.path else key

    def refuse(self, key: str, problem: str) -> NoReturn:
        path = self._below(key)
        raise JobError(f"{self.file}: {path}: {problem}", key=path) from None

    def _unfit(self, key: str, expected: str) -> NoReturn:
        value = self.content[key]
        self.refuse(key, f"got {'nothing' if value is None else what_came(value)}, {expected}")

    def given(self, key: str) -> object:
        if key not in self.content:
            self.refuse(key, f"is missing; the file is damaged, {AGAIN}")
        return self.content[key]

    def text(self, key: str) -> str:
        value = self.given(key)
        if not isinstance(value, str):
            self._unfit(key, "expected a text")
        return value

    def two_texts(self, key: str) -> tuple[str, str]:
        value = self.given(key)
        texts = [v for v in value if isinstance(v, str)] if isinstance(value, list) else []
        if not isinstance(value, list) or not len(value) == len(texts) == 2:
            self._unfit(key, "expected two nets")
        return texts[0], texts[1]

    def positive(self, key: str) -> float:
        value = self.given(key)
        if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0 < value < 1e300:
            self._unfit(key, "expected a positive number")
        return float(value)

    def count(self, key: str, *, least: int) -> int:
        value = self.given(key)
        if isinstance(value, bool) or not isinstance(value, int) or not least <= value < 2**63:
            self._unfit(key, f"expected a whole number from {least}")
        return value

    def table(self, key: str) -> _Table:
        value = self.given(key)
        if not isinstance(value, dict):
            self._unfit(key, "expected an object")
        return _Table(value, self._below(key), self.file)

    def tables(self, key: str) -> list[_Table]:
        value = self.given(key)
        found = [v for v in value if isinstance(v, dict)] if isinstance(value, list) else []
        if not isinstance(value, list) or len(found) != len(value):
            self._unfit(key, "expected a list of objects")
        return [_Table(v, f"{self._below(key)}[{k}]", self.file) for k, v in enumerate(found)]
