"""Stock files: what a drawer holds, as a table a spreadsheet can write.

A CSV file (RFC 4180) with a header line.  Its columns, in any order, are ``kind`` (resistor or
capacitor), ``value``, ``tolerance`` and, where wanted, ``count``: how many there are, empty for
enough.  Values and tolerances are quantities as in a job file.  Empty lines are left out; lines
with the same kind, value and tolerance are one line whose counts add up.

Where a spreadsheet writes semicolons or tabs, as the header shows, these separate the columns,
and a comma in a number is its decimal point.  One followed by exactly three digits is refused:
it may be meant to group thousands.

Every error is one line: file, line, column, what came, what was expected.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import TypeVar

from netlist.jobvalues import read_part_value
from netlist.textfile import read_text_file
from synth.errors import JobError
from synth.parts import StockItem
from synth.quantities import parse, what_came

__all__ = ["parse_stock", "read_stock", "read_stock_text"]

LARGEST_FILE = 1_000_000  # bytes
MOST_LINES = 2000
KINDS = ("resistor", "capacitor")
REQUIRED = ("kind", "value", "tolerance")
COLUMNS = (*REQUIRED, "count")
SEPARATORS = ",;\t"

T = TypeVar("T")
Stock = dict[str, tuple[StockItem, ...]]

_DECIMAL_COMMA = re.compile(r"(?<=\d),(?=\d+(?:\D|$))(?!\d{3}(?:\D|$))")


def read_stock(path: str | Path) -> Stock:
    """The parts a stock file lists, by kind; a kind without a line is left out.

    Raises
    ------
    JobError
        The file cannot be read, or what `parse_stock` refuses.
    """
    file = Path(path)
    return parse_stock(read_stock_text(file), name=str(file))


def read_stock_text(file: Path) -> str:
    """The text of a stock file.

    Raises
    ------
    JobError
        The file cannot be read.
    """
    return read_text_file(file, largest=LARGEST_FILE, expected="a stock file", kind=" in CSV")


def parse_stock(text: str, *, name: str = "stock") -> Stock:
    """The parts a CSV text lists, by kind; `name` stands for the file in messages.

    Raises
    ------
    JobError
        The first thing wrong with the text; or a drawer with nothing in it.
    """
    separator = _separator(text)
    rows = _rows(text, separator, name)
    number, header = next(rows, (1, []))
    places = _places(header, f"{name}:{number}")
    counts: dict[tuple[str, float, float], int | None] = {}
    for lines, (number, cells) in enumerate(rows, start=1):
        if lines > MOST_LINES:
            raise JobError(f"{name}:{number}: got more than {MOST_LINES} lines of parts")
        kind, value, tolerance, count = _Line(cells, places, separator, f"{name}:{number}").read()
        key = kind, value, tolerance
        before = counts.get(key, 0)
        counts[key] = None if before is None or count is None else before + count
    return _by_kind(counts, name)


def _by_kind(counts: Mapping[tuple[str, float, float], int | None], name: str) -> Stock:
    """The lines with parts left in them, by kind."""
    if not counts:
        raise JobError(f"{name}: got no parts, expected at least one line below the header")
    stock: Stock = {}
    for kind in KINDS:
        if all(k != kind for k, _, _ in counts):
            continue
        stock[kind] = tuple(
            StockItem(value=value, tolerance=tolerance, count=count)
            for (k, value, tolerance), count in sorted(counts.items(), key=lambda item: item[0])
            if k == kind and count != 0
        )
        if not stock[kind]:
            raise JobError(f"{name}: got no {kind} with a count above 0, expected at least one")
    return stock


def _separator(text: str) -> str:
    """The one of `SEPARATORS` the header has most of."""
    header = next((line for line in text.splitlines() if line.strip()), "")
    return max(SEPARATORS, key=header.count)


def _rows(text: str, separator: str, name: str) -> Iterator[tuple[int, list[str]]]:
    """Cells of every line that has any, with its number counted from 1."""
    lines = text.replace("\r\n", "\n").replace("\r", "\n").split("\n")
    reader = csv.reader((f"{line}\n" for line in lines), delimiter=separator, strict=True)
    while True:
        start = reader.line_num + 1
        try:
            cells = [cell.strip() for cell in next(reader)]
        except StopIteration:
            return
        except csv.Error as error:
            raise JobError(f"{name}:{start}: {error}, expected CSV") from None
        if any(cells):
            yield start, cells


def _places(header: list[str], line: str) -> dict[str, int]:
    """Where each column stands, from the header."""
    places: dict[str, int] = {}
    for place, cell in enumerate(header):
        title = cell.lower()
        if title not in COLUMNS or title in places:
            again = " twice" if title in places else ""
            raise JobError(
                f"{line}: column {place + 1}: got {what_came(cell)}{again}, expected a header of "
                f"{', '.join(REQUIRED)} and, where wanted, count"
            )
        places[title] = place
    absent = [title for title in REQUIRED if title not in places]
    if absent:
        raise JobError(f"{line}: got no column {absent[0]}, expected {', '.join(REQUIRED)}")
    return places


class _Line:
    """One line below the header."""

    def __init__(
        self, cells: list[str], places: Mapping[str, int], separator: str, where: str
    ) -> None:
        self.cells, self.places, self.where = cells, places, where
        self.decimal_comma = separator != ","

    def read(self) -> tuple[str, float, float, int | None]:
        """Kind, value [ohm] or [F], tolerance (a ratio) and count (None: enough)."""
        if len(self.cells) > len(self.places) and any(self.cells[len(self.places) :]):
            extra = self.cells[len(self.places)]
            raise JobError(
                f"{self.where}: column {len(self.places) + 1}: got {what_came(extra)}, expected "
                f"{len(self.places)} columns as in the header"
            )
        kind = self._cell("kind", _kind)
        value = self._cell("value", lambda text: read_part_value(self._number(text), kind))
        tolerance = self._cell("tolerance", lambda text: _tolerance(self._number(text)))
        count = self._cell("count", _count) if "count" in self.places else None
        return kind, value, tolerance, count

    def _cell(self, title: str, read: Callable[[str], T]) -> T:
        place = self.places[title]
        text = self.cells[place] if place < len(self.cells) else ""
        try:
            return read(text)
        except JobError as error:
            raise JobError(f"{self.where}: column {place + 1} ({title}): {error.problem}") from None

    def _number(self, text: str) -> str:
        return _DECIMAL_COMMA.sub(".", text) if self.decimal_comma else text


def _kind(text: str) -> str:
    if text.lower() not in KINDS:
        raise JobError(f"got {what_came(text)}, expected {' or '.join(KINDS)}")
    return text.lower()


def _tolerance(text: str) -> float:
    ratio = parse(text, "%")
    if not 0 <= ratio < 1:
        raise JobError(f"got {what_came(text)}, expected 0 to below 100 %")
    return ratio


def _count(text: str) -> int | None:
    if not text:
        return None
    if not re.fullmatch(r"[0-9]{1,9}", text):
        raise JobError(f"got {what_came(text)}, expected a whole number from 0 up, or nothing")
    return int(text)
