"""Mistakes in a job file, each with its line and key path, gathered to be told at once."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import NoReturn, TypeVar

from synth.errors import ExpressionError, JobError, RealizationError
from synth.quantities import what_came

__all__ = ["Mistakes", "lines_of_keys", "telling_lines"]

T = TypeVar("T")

# What starts at the root of a job.
_TABLES = ("title", "target", "signal", "board", "accept", "loop")
_KEYED = re.compile(rf"((?:{'|'.join(_TABLES)})(?:\.[A-Za-z0-9_\[\]]+)*): (.*)", re.DOTALL)
_BARE = re.compile(r"[A-Za-z0-9_-]+(\[[0-9]+\])?")
_HEADER = re.compile(r"\s*\[{1,2}([^\[\]]+)\]{1,2}\s*(#.*)?")
_ASSIGNMENT = re.compile(r"\s*([A-Za-z0-9_\-.\"' ]+?)\s*=")


class Mistakes:
    """What is wrong with a job.

    Parameters
    ----------
    text
        The job file, to find the lines.
    name
        What to call it in messages.
    """

    def __init__(self, text: str, name: str) -> None:
        self.name = name
        self.found: list[tuple[str, str]] = []
        self._lines = lines_of_keys(text)

    def add(self, path: tuple[str, ...], problem: str) -> None:
        """Note that the key at `path` is wrong."""
        key = ".".join(p if _BARE.fullmatch(p) else what_came(p) for p in path)
        plain = tuple(p.partition("[")[0] for p in path)
        near = [at[:n] for n in range(len(path), 0, -1) for at in (path, plain)]
        known = (self._lines.get(at) for at in near)
        line = next((n for n in known if n), None)
        place = f"{self.name}:{line}" if line else self.name
        self.found.append((key, f"{place}: {key}: {problem}"))

    def attempt(self, prefix: str, build: Callable[[], T]) -> T | None:
        """The value `build` gives, or None with the mistake noted when it raises `JobError`.

        A key that does not start at the root of the job is put behind `prefix`.
        """
        try:
            return build()
        except JobError as error:
            root = prefix.partition(".")[0]
            absolute = error.key == root or error.key.startswith(f"{root}.")
            key = error.key if absolute else f"{prefix}.{error.key}".rstrip(".")
            problem = error.problem
            if isinstance(error, ExpressionError):
                caret = "".join(f"\n    {line}" for line in error.marked.split("\n"))
                problem += caret
            self.add(tuple(key.split(".")), problem)
            return None

    def stop(self) -> NoReturn:
        """Raise one `JobError` for everything found; its key is that of the first."""
        error = JobError("\n".join(message for _, message in self.found))
        error.key = self.found[0][0] if self.found else ""
        raise error


@contextmanager
def telling_lines(text: str, name: str) -> Iterator[None]:
    """Puts file and line before what is said of a key of the job after it was read.

    `text` is that of the job file, `name` what to call it.
    """
    try:
        yield
    except (JobError, RealizationError) as error:
        if found := _KEYED.fullmatch(str(error)):
            told = Mistakes(text, name)
            told.add(tuple(found[1].split(".")), found[2])
            error.args = (told.found[0][1],)
        raise


def lines_of_keys(text: str) -> dict[tuple[str, ...], int]:
    """The line, counted from 1, on which each table and key of a TOML text is first named.

    Keys inside inline tables are left out; the key that holds the table is there.  The tables of
    an array bear their number, ``networks[2]``, counted from 1.

    >>> lines_of_keys("title = 'x'\\n[board.op_amp]\\nkind = 'precision'")
    {('title',): 1, ('board',): 2, ('board', 'op_amp'): 2, ('board', 'op_amp', 'kind'): 3}
    """
    lines: dict[tuple[str, ...], int] = {}
    table: tuple[str, ...] = ()
    counts: Counter[tuple[str, ...]] = Counter()
    for number, line in enumerate(text.split("\n"), start=1):
        if header := _HEADER.fullmatch(line.rstrip("\r")):
            table = path = _parts(header[1])
            if line.lstrip().startswith("[["):
                counts[path] += 1
                lines.setdefault(path, number)
                table = path = (*path[:-1], f"{path[-1]}[{counts[path]}]")
        elif assignment := _ASSIGNMENT.match(line):
            path = table + _parts(assignment[1])
        else:
            continue
        for n in range(1, len(path) + 1):
            lines.setdefault(path[:n], number)
    return lines


def _parts(dotted: str) -> tuple[str, ...]:
    return tuple(part.strip().strip("\"'") for part in dotted.split("."))
